// Keeps the screen awake while a wait runs, and says when the battery will not last as long.

import { nodeTime } from "./nodetime.js"

const SECOND_MS = 1000

export function startWakeLock(root = document) {
  if (!root.querySelector("[data-awake]")) return
  stayAwake(root)
  root.addEventListener("visibilitychange", () => { if (!root.hidden) stayAwake(root) })
  watchBattery(root)
}

async function stayAwake(root) {
  const says = root.querySelector("[data-awake]")
  try {
    await navigator.wakeLock.request("screen")
    says.dataset.awake = "yes"
    const kept = root.querySelector("[data-awake-kept]")
    if (kept) kept.hidden = false
  } catch {
    says.dataset.awake = "no"
  }
}

async function watchBattery(root) {
  const warning = root.querySelector("[data-battery]")
  const wait = root.querySelector("time[data-countdown]")
  if (!warning || !wait || !navigator.getBattery) return
  const battery = await navigator.getBattery()
  const look = () => {
    const ends = nodeTime() + battery.dischargingTime * SECOND_MS
    warning.hidden = !(battery.dischargingTime < Infinity && ends < Date.parse(wait.dateTime))
  }
  look()
  battery.addEventListener("dischargingtimechange", look)
  battery.addEventListener("chargingchange", look)
}
