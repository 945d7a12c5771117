// A post that cannot be made stays on the page and is made again, with the same act id, when the
// node answers. There is no queue and nothing is stored: the page itself is what waits.

import { free } from "./busy.js"

const TRY_AGAIN_MS = 1500
const ANSWER_WITHIN_MS = 4000

export function startResend(root = document) {
  root.addEventListener("submit", event => {
    const form = event.target
    if (event.defaultPrevented || form.method !== "post" || form.dataset.sure === "yes") return
    event.preventDefault()
    sendWhenHeard(form, event.submitter, root)
  })
}

export async function sendWhenHeard(form, submitter, root = document) {
  const unsent = root.querySelector("[data-unsent]")
  while (!(await nodeAnswers())) {
    if (unsent) {
      unsent.hidden = false
      unsent.scrollIntoView({ block: "nearest" })
    }
    await new Promise(resolve => setTimeout(resolve, TRY_AGAIN_MS))
  }
  if (unsent) unsent.hidden = true
  free(form)
  form.dataset.sure = "yes"
  form.requestSubmit(submitter ?? undefined)
  form.dataset.sure = "no"
}

// This module's own file is asked for: every node serves it, and asking changes nothing.
async function nodeAnswers() {
  try {
    const answer = await fetch(import.meta.url, {
      method: "HEAD", cache: "no-store", signal: AbortSignal.timeout(ANSWER_WITHIN_MS),
    })
    return answer.ok
  } catch {
    return false
  }
}
