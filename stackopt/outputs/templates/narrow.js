// Hides the stacks beyond the limits from plots, list and choice.
const all = stacks.data
const count = all.rank.length
const shown = new Array(count).fill(true)
limits.forEach((slider) => {
  const values = all[slider.name], [low, high] = slider.value
  const whole = low <= slider.start && high >= slider.end
  if (whole) return
  for (let i = 0; i < count; i += 1) if (!(values[i] >= low && values[i] <= high)) shown[i] = false
})
filter.booleans = shown
const options = []
for (let i = 0; i < count; i += 1) {
  if (shown[i]) options.push([String(i), all.rank[i] + (all.what[i] ? `, ${all.what[i]}` : "") + `: ${all.stack[i]}`])
}
const kept = stacks.selected.indices.filter((index) => shown[index])
list.options = options
list.value = kept.map(String)
shown_words.text = `${options.length} of ${count} stacks within the limits`
if (kept.length !== stacks.selected.indices.length) stacks.selected.indices = kept
