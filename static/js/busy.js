// One press, one post: a form that is on its way is not sent a second time by an impatient thumb.

export function startBusy(root = document) {
  root.addEventListener("submit", event => {
    const form = event.target
    if (form.method !== "post") return
    if (form.dataset.onItsWay === "yes") {
      event.preventDefault()
      event.stopImmediatePropagation()
      return
    }
    form.dataset.onItsWay = "yes"
    event.submitter?.setAttribute("aria-busy", "true")
  })
  // a page that comes back from the browser's own memory shows an old step
  addEventListener("pageshow", event => { if (event.persisted) location.reload() })
}

export function free(form) {
  form.dataset.onItsWay = "no"
  form.querySelectorAll("[aria-busy]").forEach(button => button.removeAttribute("aria-busy"))
}
