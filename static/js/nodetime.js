// The node's time: what it printed in the page plus what has passed since, never the browser's clock.

const RETRY_MS = 60_000

let printed = NaN
let loaded = 0

export function startNodeTime(root = document) {
  const given = root.body.dataset.nodeTime
  if (!given) return false
  printed = Date.parse(given)
  loaded = performance.now()
  if (root.body.dataset.clock) {
    setInterval(() => ask(root), RETRY_MS)
    root.addEventListener("visibilitychange", () => { if (!root.hidden) ask(root) })
  }
  return !Number.isNaN(printed)
}

export function nodeTime(passed = performance.now()) {
  return printed + (passed - loaded)
}

// A tablet that slept may have stood its counter still; the node knows, so it is asked on waking.
async function ask(root) {
  const asked = performance.now()
  try {
    const answer = await fetch(root.body.dataset.clock, { cache: "no-store" })
    if (!answer.ok) return
    const at = Date.parse((await answer.text()).trim())
    if (Number.isNaN(at)) return
    printed = at
    loaded = (asked + performance.now()) / 2
  } catch {
    // the node does not answer: the time printed last goes on; a press says more (resend.js)
  }
}
