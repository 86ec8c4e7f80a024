// Draws the chosen stacks: their points, curves and cross-sections, and the table that sets them side by side.
const all = stacks.data
const picked = [...stacks.selected.indices]
const drawn = picked.slice(0, look.colours.length)

// A stack keeps its colour, marker and line as long as it stays chosen.
const before = new Map(Array.from(chosen.data.index, (index, n) => [index, chosen.data.style[n]]))
const taken = new Set(drawn.filter((index) => before.has(index)).map((index) => before.get(index)))
const style = drawn.map((index) => {
  if (before.has(index)) return before.get(index)
  let free = 0
  while (taken.has(free)) free += 1
  taken.add(free)
  return free
})
const take = (values) => style.map((n) => values[n])
const pick = (name) => drawn.map((index) => all[name][index])

const points = {index: drawn, style: style, rank: pick("rank"), colour: take(look.colours), marker: take(look.markers), size: take(look.sizes)}
for (const name of quantities) points[name] = pick(name)
chosen.data = points

requirements.forEach((requirement, r) => {
  const x = requirement.x, count = x.length
  const level = (index) => Array.from(requirement.packed.slice(index * count, (index + 1) * count), (v) => v / per_db)
  const levels = drawn.map(level)
  const first = requirement.has_static ? 1 : 0
  lines[r].data = {
    xs: drawn.map(() => x.slice(first)), ys: levels.map((y) => y.slice(first)),
    colour: take(look.colours), dash: take(look.dashes), rank: pick("rank"), stack: pick("stack"),
  }
  const marks = {x: [], y: [], colour: [], marker: [], size: []}
  const every = Math.max(1, Math.floor(count / 8))
  levels.forEach((y, n) => {
    for (let i = 0; i < count; i += 1) {
      if (i >= first && (i + Math.floor(style[n] * every / 3)) % every !== 0) continue
      marks.x.push(x[i]); marks.y.push(y[i])
      marks.colour.push(look.colours[style[n]]); marks.marker.push(look.markers[style[n]])
      marks.size.push(0.65 * look.sizes[style[n]])
    }
  })
  dots[r].data = marks
})

// Cross-sections: bars to one scale, and a line of text for each layer, moved apart where layers are thin.
const bars = {left: [], right: [], top: [], bottom: [], fill: [], hatch: []}
const names = {x: [], y: [], text: []}
const leads = {xs: [], ys: []}
const heads = {x: [], y: [], text: [], marker: [], colour: []}
const depth_of = (index) => layers_of[index].reduce((sum, n) => sum + layer_mm[n], 0)
const deepest = Math.max(1e-6, ...drawn.map(depth_of))
const bottom = 1.05 * deepest, top = -0.22 * deepest
const pitch = (bottom - top) * 15 / section_pixels
drawn.forEach((index, n) => {
  const numbers = layers_of[index]
  const middles = []
  let depth = 0
  for (const number of numbers) {
    bars.left.push(n + 0.03); bars.right.push(n + 0.24)
    bars.top.push(depth); bars.bottom.push(depth + layer_mm[number])
    bars.fill.push(layer_fill[number]); bars.hatch.push(layer_hatch[number])
    middles.push(depth + layer_mm[number] / 2)
    depth += layer_mm[number]
  }
  const rows = [...middles]
  for (let i = 1; i < rows.length; i += 1) rows[i] = Math.max(rows[i], rows[i - 1] + pitch)
  let floor = Math.max(bottom - pitch / 2, rows.length * pitch)
  for (let i = rows.length - 1; i >= 0; i -= 1) { rows[i] = Math.min(rows[i], floor); floor = rows[i] - pitch }
  numbers.forEach((number, i) => {
    names.x.push(n + 0.3); names.y.push(rows[i]); names.text.push(layer_words[number])
    leads.xs.push([n + 0.24, n + 0.29]); leads.ys.push([middles[i], rows[i]])
  })
  heads.text.push("rank " + all.rank[index] + (all.what[index] ? ", " + all.what[index] : ""))
  heads.x.push(n + 0.05); heads.y.push(top + pitch)
  heads.marker.push(look.markers[style[n]]); heads.colour.push(look.colours[style[n]])
})
section_bars.data = bars; section_names.data = names; section_leads.data = leads; section_heads.data = heads
section_x.end = Math.max(4, drawn.length)
section_y.setv({start: bottom, end: top})

// The table: one column for each chosen stack, the best value of a row said in words.
const clean = (text) => String(text).replace(/[&<>"']/g, (c) => "&#" + c.charCodeAt(0) + ";")
const row = (head, cells, kind) => `<tr><th scope="row">${head}</th>` +
  cells.map((cell) => `<td class="${kind || ""}">${cell}</td>`).join("") + "</tr>"
const numbers_row = (head, name, digits, sign, words) => {
  const values = pick(name)
  const known = values.filter((v) => !Number.isNaN(v))
  const best = known.length > 1 && new Set(known).size > 1 ? Math.min(...known.map((v) => sign * v)) : null
  return row(head, values.map((value, n) => {
    const text = Number.isNaN(value) ? "no price" : words ? clean(words[n]) : value.toFixed(digits)
    return sign * value === best ? `<b>${text}</b> ◂ best` : text
  }), "number")
}
if (drawn.length === 0) {
  table.text = "<p>Nothing is chosen. Click a point, or choose a line of the list.</p>"
} else {
  const symbol = (n) => `<span style="color:${look.colours[style[n]]}">${look.signs[style[n]]}</span>`
  const title = (index, n) => `${symbol(n)} rank ${clean(all.rank[index])}` +
    (all.what[index] ? `<br><span class="what">${clean(all.what[index])}</span>` : "")
  table.text = "<table><thead><tr><th></th>" +
    drawn.map((index, n) => `<th scope="col">${title(index, n)}</th>`).join("") + "</tr></thead><tbody>" +
    row("stack, source side first", drawn.map((index) => clean(all.stack[index]).replaceAll(" / ", " /<br>"))) +
    numbers_row("sheets", "sheets", 0, 1) +
    numbers_row("mass, kg/m²", "mass", 3, 1) +
    numbers_row(`cost, ${clean(currency)}/m²`, "cost", 2, 1) +
    numbers_row("thickness, mm", "thickness", 3, 1) +
    more_quantities.map((name) => numbers_row(clean(name[1]), name[0], 3, 1)).join("") +
    numbers_row("smallest margin", "margin", 2, -1, pick("margin_words")) +
    row("tightest at", drawn.map((index) => clean(all.tightest_words[index])), "number") +
    (requirements.length > 1 ? row("tightest requirement", pick("requirement").map(clean)) : "") +
    "</tbody></table>"
}
const more = picked.length - drawn.length
chosen_words.text = `${picked.length} chosen` +
  (more > 0 ? `; the first ${drawn.length} are drawn, the CSV file has all` : "")

const wanted = picked.map(String)
if (wanted.join() !== [...list.value].join()) list.value = wanted
