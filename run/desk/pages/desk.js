// Keys, clicks and fields to the server; texts back onto the page. All the thinking is done by the server.
// Given by it: message, page (data sources), star, here, pin (lists of glyph renderers to blink).
const root = document.documentElement
const byId = (id) => document.getElementById(id)
let count = 0
const send = (what, values = {}) => {
  const fields = {type: byId("type").value, remark: byId("remark").value, who: byId("who").value}
  message.data = {n: [count += 1], what: [what], values: [JSON.stringify({...fields, ...values})]}
}

const KEYS = {
  m: ["best"], n: ["peak"], r: ["rival"], p: ["pin"], o: ["swap"], b: ["blink"], v: ["measured"], l: ["names"],
  j: ["next"], k: ["previous"], pagedown: ["next"], pageup: ["previous"], a: ["accept"], e: ["edit"], x: ["aside"],
  u: ["undo"], s: ["standard", {step: 1}], ",": ["blur", {step: -1}], ".": ["blur", {step: 1}],
  "[": ["velocity", {step: -1}], "]": ["velocity", {step: 1}], "0": ["plain"], f: ["enlarge"], d: ["theme"],
  arrowleft: ["move", {right: -1}], arrowright: ["move", {right: 1}], arrowup: ["move", {up: 1}], arrowdown: ["move", {up: -1}],
}
const LOCAL = {
  help: () => byId("help").open ? byId("help").close() : byId("help").showModal(),
  theme: () => {
    const dark = !root.classList.contains("dark")
    localStorage.setItem("starfathom-dark", dark ? "1" : "0")
    send("theme", {dark})
  },
}
const act = (what, values) => LOCAL[what] ? LOCAL[what]() : send(what, values)

document.addEventListener("keydown", (event) => {
  const at = event.composedPath()[0]
  if (event.ctrlKey || event.metaKey || event.altKey || event.isComposing) return
  if (at.tagName === "INPUT") {
    if (event.key === "Enter") { event.preventDefault(); at.blur(); if (root.classList.contains("editing")) send("amend") }
    if (event.key === "Escape") { at.blur(); send("cancel") }
    return
  }
  if (event.key === "?" || event.key === "h") { event.preventDefault(); return LOCAL.help() }
  if (byId("help").open) return
  if (root.classList.contains("editing") && event.key === "Enter" && at.tagName !== "BUTTON") return send("amend")
  if (event.key === "Escape") return send("cancel")
  if (event.key === "t") { event.preventDefault(); return byId("remark").focus() }
  if (event.key === "w") { event.preventDefault(); return byId("who").focus() }
  if (event.key >= "1" && event.key <= "9") {
    const chip = document.querySelectorAll("#flags button")[Number(event.key) - 1]
    return chip && send("flag", {name: chip.dataset.name})
  }
  const known = KEYS[event.key.toLowerCase()]
  if (!known || (event.repeat && !["move", "blur", "velocity"].includes(known[0]))) return
  event.preventDefault()
  const values = {...known[1]}
  if (event.shiftKey) {
    for (const k of ["right", "step"]) if (values[k]) values[k] *= k === "right" ? 5 : -1
    if (known[0] === "enlarge") values.whole = true
  }
  act(known[0], values)
})

document.addEventListener("click", (event) => {
  const hit = event.composedPath().find((node) => node.dataset && node.dataset.do)
  if (!hit) return
  const values = {}
  if (hit.dataset.step) values.step = Number(hit.dataset.step)
  if (hit.dataset.star) values.star = Number(hit.dataset.star)
  if (hit.dataset.name) values.name = hit.dataset.name
  act(hit.dataset.do, values)
  if (hit.tagName === "BUTTON") hit.blur()
})

let blinking = 0
const blink = (on, pinned) => {
  clearInterval(blinking)
  const [first, second] = pinned ? [here, pin] : [star, here]
  const show = (list, yes) => list.forEach((renderer) => { renderer.visible = yes })
  for (const list of [star, here, pin]) show(list, true)
  root.classList.toggle("blinking", on)
  if (!on) return
  let phase = false
  const turn = () => { phase = !phase; show(first, phase); show(second, !phase) }
  turn()
  blinking = setInterval(turn, 450)
}

const PUT = {
  html: (id, text) => { byId(id).innerHTML = text },
  value: (id, text) => { byId(id).value = text },
  class: (id, text) => { for (const [name, on] of Object.entries(JSON.parse(text))) root.classList.toggle(name, on) },
  on: (id, text) => { for (const [what, on] of Object.entries(JSON.parse(text)))
    document.querySelectorAll(`button[data-do="${what}"]`).forEach((b) => b.classList.toggle("on", on)) },
  focus: (id) => { byId(id).focus(); byId(id).select() },
  reveal: () => { const now = document.querySelector("#queue .now"); if (now) now.scrollIntoView({block: "nearest"}) },
  blink: (id, text) => blink(text !== "", text === "pin"),
}
page.connect(page.properties.data.change, () => {
  const {id, kind, text} = page.data
  for (let k = 0; k < id.length; k++) PUT[kind[k]](id[k], text[k])
})

const kept = localStorage.getItem("starfathom-dark")
const dark = kept === null ? matchMedia("(prefers-color-scheme: dark)").matches : kept === "1"
send("hello", {dark})
root.dataset.ready = "1"
