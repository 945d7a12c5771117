// The scan field is ready when the page is: a wedge scanner types into it and presses Enter.

export function startScan(root = document) {
  const field = root.querySelector("[data-scan]")
  if (!field) return
  if (!field.autofocus) field.focus({ preventScroll: true })
  root.addEventListener("keydown", event => {
    const elsewhere = event.target.closest?.("input, select, textarea, button, a, summary")
    if (elsewhere || event.ctrlKey || event.altKey || event.metaKey) return
    if (event.key.length === 1) field.focus()
  })
}
