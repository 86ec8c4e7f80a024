// Saves the chosen stacks with the columns of front.csv.
const all = stacks.data
const quoted = (value) => /[",\n]/.test(value) ? `"${value.replaceAll('"', '""')}"` : value
const number = (value) => Number.isNaN(value) ? "" : String(value)
const lines = stacks.selected.indices.map((i) => [
  quoted(all.rank[i]), quoted(all.stack[i]), number(all.sheets[i]), number(all.mass[i]), number(all.cost[i]),
  number(all.thickness[i]), number(all.margin[i]), number(all.tightest_hz[i]), quoted(all.requirement[i]),
].join(","))
const text = [header, ...lines].join("\n") + "\n"
const link = document.createElement("a")
link.href = URL.createObjectURL(new Blob([text], {type: "text/csv"}))
link.download = "chosen_stacks.csv"
document.body.appendChild(link)
link.click()
link.remove()
setTimeout(() => URL.revokeObjectURL(link.href), 1000)
