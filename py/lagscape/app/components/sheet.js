// Keeps the shown HTML equal to what Python wrote, without touching what the hand is on, and reports what the hand does.
// An element says what it does by data-act (its act), data-key (which one), data-live (report while it moves too).

function sameKind(a, b) {
  return a.nodeType === b.nodeType && a.nodeName === b.nodeName && (a.id || "") === (b.id || "")
}

function morphChildren(old, next, held) {
  const before = Array.from(old.childNodes)
  const after = Array.from(next.childNodes)
  after.forEach((child, i) => {
    const match = before[i]
    if (!match) old.appendChild(child.cloneNode(true))
    else if (sameKind(match, child)) morph(match, child, held)
    else old.replaceChild(child.cloneNode(true), match)
  })
  before.slice(after.length).forEach((child) => child.remove())
}

function morph(old, next, held) {
  if (old.nodeType === 3) {
    if (old.data !== next.data) old.data = next.data
    return
  }
  for (const {name, value} of Array.from(next.attributes)) {
    if (old.getAttribute(name) !== value) old.setAttribute(name, value)
  }
  for (const {name} of Array.from(old.attributes)) {
    if (!next.hasAttribute(name) && name !== "open") old.removeAttribute(name)
  }
  if (old.nodeName === "INPUT" && old !== held) {
    const value = next.getAttribute("value") ?? ""
    if (old.type === "checkbox" || old.type === "radio") old.checked = next.hasAttribute("checked")
    else if (old.value !== value) old.value = value
  }
  morphChildren(old, next, held)
  if (old.nodeName === "SELECT") {
    const chosen = next.querySelector("option[selected]")
    if (chosen && old.value !== chosen.value) old.value = chosen.value
  }
}

state.queue = []
state.serial = 0

state.report = (target, event, live) => {
  const value = target.type === "checkbox" ? target.checked : target.value ?? ""
  state.serial += 1
  const entry = {serial: state.serial, act: target.dataset.act, key: target.dataset.key ?? "", value: String(value), live, event}
  if (live) {
    data.live = entry
  } else {
    state.queue = [...state.queue.slice(-15), entry]
    data.requests = state.queue
  }
}

state.apply = () => {
  const next = document.createElement("div")
  next.innerHTML = data.content.html
  const focused = root.getRootNode().activeElement
  morphChildren(root, next, state.typing ? focused : null)
}

state.adjust = () => {
  const focused = state.typing ? root.getRootNode().activeElement : null
  for (const [key, values] of Object.entries(data.adjusted)) {
    for (const [act, value] of Object.entries(values)) {
      const control = root.querySelector(`[data-key="${CSS.escape(key)}"][data-act="${CSS.escape(act)}"]`)
      if (control && control !== focused && control.value !== value) control.value = value
    }
  }
}

const acting = (event) => event.target.closest?.("[data-act]")

root.addEventListener("input", (event) => {
  const target = acting(event)
  state.typing = true
  if (target?.dataset.live !== undefined && event.target === target) state.report(target, "input", true)
})
root.addEventListener("change", (event) => {
  const target = acting(event)
  state.typing = false
  if (target && event.target === target) state.report(target, "change", false)
})
root.addEventListener("click", (event) => {
  const target = acting(event)
  if (target && target.nodeName === "BUTTON") state.report(target, "click", false)
})
root.addEventListener("keydown", (event) => {
  const target = acting(event)
  if (!target || target.nodeName !== "INPUT") return
  if (target.type === "checkbox" && event.key === "Delete") {
    target.checked = false
    state.report(target, "change", false)
  }
  if (target.type !== "text") return
  if (event.key === "Enter") {
    state.typing = false
    state.report(target, "change", false)
  } else if (event.key === "Escape") {
    state.typing = false
    target.value = target.getAttribute("value") ?? ""
    state.report(target, "escape", false)
  }
})
root.addEventListener("focusout", () => { state.typing = false })
state.apply()
