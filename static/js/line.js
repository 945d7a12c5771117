// Keeps the demo's page fresh: asks for it again and takes over the parts that changed.

const EVERY_MS = 2_000

export async function takeOver(root = document, ask = fetch) {
  const answer = await ask("/", { cache: "no-store" })
  if (!answer.ok) return
  const fresh = new DOMParser().parseFromString(await answer.text(), "text/html")
  for (const part of root.querySelectorAll("[data-fresh]")) {
    const come = fresh.getElementById(part.id)
    // A button that has the focus stays: it may be pressed this very moment.
    if (!come || part.outerHTML === come.outerHTML || part.contains(root.activeElement)) continue
    part.replaceWith(root.importNode(come, true))
  }
}

async function keepFresh() {
  try {
    await takeOver()
  } catch {
    // The demo has ended; the page stays as it was last seen.
  }
  setTimeout(keepFresh, EVERY_MS)
}

setTimeout(keepFresh, EVERY_MS)
