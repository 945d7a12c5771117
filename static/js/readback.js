// Reads a statement of last use back on the same page while it is chosen, so that one press
// records it. Without this the node reads it back on a page of its own.

import { nodeTime, startNodeTime } from "./nodetime.js"

const MINUTE_MS = 60_000

export function startReadback(root = document) {
  const form = root.querySelector("form[data-readback]")
  if (!form || !startNodeTime(root)) return
  const place = root.querySelector("[data-readback-here]")
  const said = form.elements.namedItem("said")
  const show = () => {
    const text = spoken(form)
    place.hidden = !text
    if (text) {
      place.querySelector("b").textContent = text.shortest
      place.querySelector("span").textContent = text.says
    }
    // only what was read back on this page may be recorded without another page
    said.value = text ? "yes" : ""
    root.querySelectorAll("[data-says-read]").forEach(button => {
      button.textContent = text ? button.dataset.saysRead : button.dataset.saysUnread
    })
  }
  form.addEventListener("input", show)
  show()
}

// { shortest: "5 h 10", says: "at the shortest: “About 01:00, bath.”" }, nothing while nothing is
// chosen or a time is typed. The words come from the page.
export function spoken(form, now = nodeTime) {
  const exact = chosen(form, "exact")
  const at = chosen(form, "at")
  const typed = [...form.querySelectorAll("input[type='datetime-local']")].some(field => field.value)
  if (!exact || typed || (exact.value !== "at" && exact.value !== "about") || !at) return null
  const give = exact.value === "about" ? Number(form.dataset.about) * MINUTE_MS : 0
  const shortest = Math.max(0, now() - (Date.parse(at.value) + give))
  const says = form.dataset.sentence
    .replace("{exact}", exact.dataset.says)
    .replace("{when}", at.dataset.says)
    .replace("{where}", chosen(form, "where")?.dataset.says ?? "")
  return { shortest: hours(shortest), says }
}

function chosen(form, name) {
  return form.querySelector(`input[name="${name}"]:checked`)
}

function hours(ms) {
  const minutes = Math.floor(ms / MINUTE_MS)
  return `${Math.floor(minutes / 60)} h ${String(minutes % 60).padStart(2, "0")}`
}
