// The end of a wait rings and shakes the tablet, then the page asks the node what is due.

const TONES_HZ = [880, 1175, 880, 1175, 1568]
const TONE_S = 0.22
const RELOAD_AFTER_MS = 1800

export function startRing(root = document) {
  root.addEventListener("countdown:over", ({ target }) => {
    if (!target.hasAttribute("data-ring")) return
    ring()
    shake()
    if (target.dataset.ring === "reload") setTimeout(() => location.reload(), RELOAD_AFTER_MS)
  })
  root.querySelectorAll("[data-try-ring]").forEach(button => {
    button.hidden = false
    button.addEventListener("click", () => { ring(); shake() })
  })
}

export function ring(Audio = globalThis.AudioContext) {
  if (!Audio) return
  const sound = new Audio()
  TONES_HZ.forEach((hertz, place) => {
    const tone = sound.createOscillator()
    const loudness = sound.createGain()
    const from = sound.currentTime + place * TONE_S
    tone.frequency.value = hertz
    loudness.gain.setValueAtTime(0.3, from)
    loudness.gain.exponentialRampToValueAtTime(0.001, from + TONE_S)
    tone.connect(loudness).connect(sound.destination)
    tone.start(from)
    tone.stop(from + TONE_S)
  })
}

function shake() {
  navigator.vibrate?.([300, 150, 300, 150, 600])
}
