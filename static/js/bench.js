// The counter at speed: a scan that arrives while another is answered waits its turn, none is lost.
// Every scan is posted by itself with the act the node minted for it; the same act goes again when
// the line breaks. Without this module each scan is a plain form post.

const ANSWER_WITHIN_MS = 8000
const TRY_AGAIN_MS = 1500
const TONES_HZ = {
  in: [1320], hold: [660, 660], stop: [220, 220, 220], number: [990], card: [990, 1180], back: [880, 660],
}
const TONE_S = 0.12
const CARD = /^\s*counter\b/i

export function startCounter(root = document) {
  const form = root.querySelector("form[data-counter]")
  if (form) new Counter(form, root).start()
  const seals = root.querySelector("[data-seals]")
  if (seals) seals.addEventListener("keydown", parted)
}

// A scanner ends each seal with Enter, and a cooler may bear several: Enter parts them.
function parted(event) {
  if (event.key !== "Enter") return
  event.preventDefault()
  const field = event.target
  if (field.value.trim() && !/,\s*$/.test(field.value)) field.value += ", "
}

class Counter {
  constructor(form, root) {
    this.form = form
    this.root = root
    this.field = form.elements.namedItem("bottle")
    this.number = form.elements.namedItem("laboratory_number")
    this.hint = form.querySelector("[data-queue]")
    this.said = this.hint.textContent
    this.waiting = []
    this.busy = false
  }

  start() {
    this.form.addEventListener("submit", event => this.take(event))
    this.root.querySelector("#answer").addEventListener("submit", event => this.takeWay(event))
    this.form.addEventListener("change", event => this.chosen(event))
    addEventListener("beforeunload", event => this.keepOpen(event))
    this.root.addEventListener("keydown", event => this.catchStrayKeys(event))
    this.focus()
  }

  // Everything but the bottle and the number belongs to this one scan and falls back after it.
  take(event) {
    event.preventDefault()
    event.stopImmediatePropagation()
    const fields = new FormData(this.form)
    const scanned = String(fields.get("bottle")).trim()
    if (!scanned || this.chooseWay(scanned)) return
    const unnumbered = !String(fields.get("laboratory_number")).trim()
    if (fields.get("numbering") === "sticker" && unnumbered && !CARD.test(scanned)) {
      this.number.focus()
      return
    }
    this.queue(fields, this.number.value !== this.number.defaultValue)
    this.clear()
  }

  queue(fields, typed) {
    this.waiting.push({ fields, typed })
    this.count()
    this.work()
  }

  // A stop that asks what becomes of a bottle: 1 or 2 and Enter answers it without a mouse.
  chooseWay(scanned) {
    const asks = this.root.querySelector("#answer form[data-ways]")
    const button = asks?.querySelector(`[data-key="${CSS.escape(scanned)}"]`)
    if (!button) return false
    this.field.value = ""
    const note = asks.querySelector("[data-note]")
    if (button.value === "keep" && !note.value.trim()) note.focus()
    else asks.requestSubmit(button)
    return true
  }

  takeWay(event) {
    event.preventDefault()
    event.stopImmediatePropagation()
    const asks = event.target
    const fields = new FormData(asks, event.submitter ?? asks.querySelector("[data-key]"))
    if (fields.get("arrived") === "keep" && !String(fields.get("reason")).trim()) {
      asks.querySelector("[data-note]").focus()
      return
    }
    asks.closest(".told").remove()
    this.queue(fields, fields.get("numbering") !== "counted" || !this.number.defaultValue)
    this.focus()
  }

  async work() {
    if (this.busy) return
    this.busy = true
    while (this.waiting.length) {
      const scan = this.waiting[0]
      const { fields } = scan
      fields.set("act", this.form.elements.namedItem("act").value)
      if (!fields.has("arrived")) fields.set("cards", this.form.elements.namedItem("cards").value)
      if (fields.get("numbering") === "counted" && !scan.typed) {
        fields.set("laboratory_number", this.number.defaultValue)
      }
      const answer = await this.send(fields)
      this.waiting.shift()
      this.show(answer, fields)
      this.count()
    }
    this.busy = false
  }

  // The act stays the same until the node has answered, so a reply lost on the way records once.
  async send(fields) {
    const unsent = this.root.querySelector("[data-unsent]")
    for (;;) {
      try {
        const reply = await fetch(this.form.action, {
          method: "POST", body: new URLSearchParams(fields), headers: { Accept: "application/json" },
          signal: AbortSignal.timeout(ANSWER_WITHIN_MS),
        })
        if (unsent) unsent.hidden = true
        return await reply.json()
      } catch {
        if (unsent) unsent.hidden = false
        await new Promise(resolve => setTimeout(resolve, TRY_AGAIN_MS))
      }
    }
  }

  show(answer, fields) {
    const word = answer.word || "stop"
    this.tell(answer)
    if (answer.received) this.root.querySelector("#received").innerHTML = answer.received
    const tally = this.root.querySelector("#tally")
    if (tally && answer.tally !== undefined) tally.innerHTML = answer.tally
    if (answer.cards !== undefined) this.form.elements.namedItem("cards").value = answer.cards
    if (answer.act) this.form.elements.namedItem("act").value = answer.act
    if (answer.number !== undefined && fields.get("numbering") === "counted") this.next(answer.number)
    beep(TONES_HZ[word] ?? TONES_HZ.stop)
    if (word === "stop") navigator.vibrate?.(300)
  }

  // A stop stays, small, under what follows it until somebody has seen it: nothing else keeps it.
  tell(answer) {
    const place = this.root.querySelector("#answer")
    const before = [...place.children].filter(panel => panel.matches(".told--stop"))
    const fresh = document.createElement("template")
    if (answer.answer) fresh.innerHTML = answer.answer
    else fresh.content.append(this.plainStop(answer.says))
    fresh.content.firstElementChild?.classList.add("told--new")
    place.replaceChildren(fresh.content, ...before)
    place.classList.toggle("crowded", before.length > 0)
    before.forEach(panel => this.keepSmall(panel))
  }

  keepSmall(panel) {
    panel.classList.remove("told--new")
    panel.classList.add("told--before")
    if (panel.querySelector(".told__seen")) return
    const seen = document.createElement("button")
    seen.type = "button"
    seen.className = "told__seen"
    seen.textContent = this.root.querySelector("#answer").dataset.seen
    seen.addEventListener("click", () => { panel.remove(); this.focus() })
    const ways = panel.querySelector("[data-ways] .buttons")
    if (ways) seen.classList.add("button", "button--plain", "button--quiet")
    ;(ways ?? panel).append(seen)
  }

  plainStop(says) {
    const panel = document.createElement("div")
    panel.className = "told told--stop"
    const sentence = document.createElement("p")
    sentence.className = "told__says"
    sentence.textContent = says
    panel.append(sentence)
    return panel
  }

  // A number that the clerk is typing is left alone.
  next(number) {
    const untouched = this.number.value === this.number.defaultValue
    this.number.defaultValue = number
    if (untouched) this.number.value = number
  }

  clear() {
    this.field.value = ""
    this.number.value = this.form.elements.namedItem("numbering").value === "counted"
      ? this.number.defaultValue : ""
    this.form.querySelector("[name=outcome][value=accepted]").checked = true
    this.form.elements.namedItem("checks").value = ""
    this.form.elements.namedItem("reason").value = ""
    this.focus()
  }

  chosen({ target }) {
    if (target.name === "outcome" && target.value !== "accepted") {
      this.form.querySelector("details").open = true
    } else if (target.name === "numbering") {
      this.number.value = target.value === "counted" ? this.number.defaultValue : ""
      this.form.querySelectorAll("[data-numbering]").forEach(says => {
        says.hidden = says.dataset.numbering !== target.value
      })
    }
    // the next scan may come at any moment; only who types a reason or a number keeps the cursor
    if (target.type === "radio" || target.name === "checks") this.focus()
  }

  count() {
    const n = this.waiting.length
    this.hint.textContent = n > 1 ? `${this.said} (${n})` : this.said
  }

  focus() {
    this.field.focus({ preventScroll: true })
  }

  // A scanner types wherever the cursor is; what no field takes goes to the scan field.
  catchStrayKeys(event) {
    const elsewhere = event.target.closest?.("input, select, textarea, button, a, summary")
    if (elsewhere || event.ctrlKey || event.altKey || event.metaKey) return
    if (event.key.length === 1) this.focus()
  }

  keepOpen(event) {
    if (this.waiting.length) event.preventDefault()
  }
}

export function beep(tones, Audio = globalThis.AudioContext) {
  if (!Audio) return
  const sound = new Audio()
  tones.forEach((hertz, place) => {
    const tone = sound.createOscillator()
    const loudness = sound.createGain()
    const from = sound.currentTime + place * TONE_S * 1.5
    tone.frequency.value = hertz
    loudness.gain.setValueAtTime(0.25, from)
    loudness.gain.exponentialRampToValueAtTime(0.001, from + TONE_S)
    tone.connect(loudness).connect(sound.destination)
    tone.start(from)
    tone.stop(from + TONE_S)
  })
  setTimeout(() => sound.close(), 1000)
}

startCounter(document)
