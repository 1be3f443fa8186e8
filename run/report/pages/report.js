// Sorting and filtering of the summary table.
const table = document.getElementById("stars")
if (table) {
  const body = table.tBodies[0]
  const rows = Array.from(body.rows)
  const value = (row, k) => {
    const cell = row.cells[k]
    const number = cell.dataset.v
    return number === undefined ? cell.textContent.trim().toLowerCase() : number === "" ? NaN : Number(number)
  }
  table.tHead.rows[0].querySelectorAll("th").forEach((head, k) => head.querySelector("button").addEventListener("click", () => {
    const down = head.getAttribute("aria-sort") === "ascending"
    table.tHead.querySelectorAll("th").forEach((other) => other.removeAttribute("aria-sort"))
    head.setAttribute("aria-sort", down ? "descending" : "ascending")
    const sign = down ? -1 : 1
    rows.sort((a, b) => {
      const x = value(a, k), y = value(b, k)
      if (Number.isNaN(x) || Number.isNaN(y)) return Number.isNaN(x) - Number.isNaN(y)
      return x < y ? -sign : x > y ? sign : 0
    })
    body.append(...rows)
  }))
  const words = document.getElementById("words"), only = document.getElementById("only"), shown = document.getElementById("shown")
  const filter = () => {
    const wanted = words.value.toLowerCase().split(/\s+/).filter(Boolean)
    let count = 0
    for (const row of rows) {
      const text = row.textContent.toLowerCase()
      const fits = wanted.every((w) => text.includes(w)) && (only.value === "" || row.dataset.is.split(" ").includes(only.value))
      row.hidden = !fits
      count += fits
    }
    shown.textContent = `${count} of ${rows.length} shown`
  }
  words.addEventListener("input", filter)
  only.addEventListener("change", filter)
  filter()
}
