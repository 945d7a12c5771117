// Counts to or from the moment in datetime. Only a display: the node decides when a step is due.

import { nodeTime, startNodeTime } from "./nodetime.js"

const SECOND_MS = 1000

export function startCountdowns(root = document) {
  const counted = root.querySelectorAll("time[data-countdown], time[data-countup]")
  if (!counted.length || !startNodeTime(root)) return
  counted.forEach(element => count(element, root))
}

export function count(element, root = document, now = nodeTime) {
  const moment = Date.parse(element.dateTime)
  const up = element.hasAttribute("data-countup")

  function show() {
    const apart = up ? now() - moment : moment - now()
    element.textContent = clockFace(apart)
    drawStretch(root, now())
    if (up || apart > 0) {
      setTimeout(show, SECOND_MS - mod(up ? apart : -apart, SECOND_MS) + 5)
    } else {
      element.classList.add("countdown--over")
      element.dispatchEvent(new CustomEvent("countdown:over", { bubbles: true }))
    }
  }

  show()
}

export function clockFace(apartMs) {
  const seconds = Math.max(0, Math.ceil(apartMs / SECOND_MS))
  const two = number => String(number).padStart(2, "0")
  const hours = Math.floor(seconds / 3600)
  const minutes = Math.floor(seconds / 60) % 60
  if (hours) return `${hours}:${two(minutes)}:${two(seconds % 60)}`
  return `${minutes}:${two(seconds % 60)}`
}

function drawStretch(root, now) {
  root.querySelectorAll("[data-stretch]").forEach(bar => {
    const from = Date.parse(bar.dataset.since)
    const to = Date.parse(bar.dataset.until)
    const part = Math.min(1, Math.max(0, (now - from) / (to - from)))
    bar.querySelector(".stretch__gone")?.setAttribute("width", String(Math.round(part * 1000)))
  })
}

function mod(number, by) {
  return ((number % by) + by) % by
}
