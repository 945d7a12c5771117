// A bottle's code read from a picture or, where the browser lends its camera, from what it sees.
// The node reads it; this module only sends it pictures. Without scripts the picture goes with the
// form.

const EVERY_MS = 250
const WIDTH = 1280
const QUALITY = 0.8
const ANSWER_WITHIN_MS = 8000

export function startCamera(root = document) {
  root.querySelectorAll("[data-camera]").forEach(place => new Camera(place, root).start())
}

class Camera {
  constructor(place, root) {
    this.place = place
    this.root = root
    this.form = place.closest("form")
    this.field = this.form.elements.namedItem(place.dataset.camera)
    this.file = place.querySelector("input[type=file]")
    this.live = place.querySelector("[data-camera-live]")
    this.view = place.querySelector("[data-camera-view]")
    this.video = place.querySelector("video")
    this.sayings = [...place.querySelectorAll("[data-camera-says]")]
    this.stream = null
  }

  start() {
    this.place.classList.add("camera--ready")
    this.file.addEventListener("change", () => this.readFile())
    this.place.querySelector("[data-camera-stop]").addEventListener("click", () => this.stop())
    this.view.addEventListener("close", () => this.stop())
    this.root.addEventListener("visibilitychange", () => { if (this.root.hidden) this.stop() })
    addEventListener("pagehide", () => this.stop())
    if (!navigator.mediaDevices?.getUserMedia) return
    this.live.hidden = false
    this.live.addEventListener("click", () => this.watch())
  }

  async readFile() {
    if (!this.file.files.length) return
    this.say(this.place.dataset.looking)
    const answer = await this.ask(this.file.files[0])
    // emptied, so that the next picture is noticed though its file has the same name
    if (answer.code || answer.kind) this.file.value = ""
    this.hear(answer)
  }

  async watch() {
    try {
      this.stream = await navigator.mediaDevices.getUserMedia({
        audio: false, video: { facingMode: "environment", width: { ideal: WIDTH } },
      })
      this.video.srcObject = this.stream
      await this.video.play()
    } catch {
      this.stop()
      this.say(this.place.dataset.barred)
      return
    }
    this.say(this.place.dataset.looking)
    this.view.showModal()
    this.look()
  }

  // One frame at a time: a slow node gets fewer, never a queue of them.
  async look() {
    while (this.stream) {
      const began = performance.now()
      const seen = await this.frame()
      // stopped meanwhile, or a camera that gives no picture yet
      const answer = this.stream && seen ? await this.ask(seen) : { kind: "no-code-seen" }
      if (!this.stream) return
      if (answer.code) {
        this.stop()
        this.hear(answer)
        return
      }
      this.say(answer.kind === "no-code-seen" ? this.place.dataset.looking : answer.says)
      await new Promise(resolve => setTimeout(resolve, EVERY_MS - (performance.now() - began)))
    }
  }

  frame() {
    const { videoWidth, videoHeight } = this.video
    const canvas = document.createElement("canvas")
    const scale = Math.min(1, WIDTH / videoWidth)
    canvas.width = videoWidth * scale
    canvas.height = videoHeight * scale
    canvas.getContext("2d").drawImage(this.video, 0, 0, canvas.width, canvas.height)
    return new Promise(resolve => canvas.toBlob(resolve, "image/jpeg", QUALITY))
  }

  async ask(picture) {
    const sent = new FormData()
    sent.set("token", this.form.elements.namedItem("token").value)
    sent.set("want", this.place.dataset.want ?? "bottle")
    sent.set("picture", picture, "picture.jpg")
    try {
      const reply = await fetch(this.place.dataset.scanAt, {
        method: "POST", body: sent, headers: { Accept: "application/json" },
        signal: AbortSignal.timeout(ANSWER_WITHIN_MS),
      })
      return await reply.json()
    } catch {
      return { says: this.place.dataset.unheard }
    }
  }

  hear({ code, says }) {
    this.say(code ? "" : says)
    if (!code) return
    this.field.value = code
    if (this.place.hasAttribute("data-submit")) this.form.requestSubmit()
    else this.field.focus({ preventScroll: true })
  }

  stop() {
    this.stream?.getTracks().forEach(track => track.stop())
    this.stream = null
    this.video.srcObject = null
    if (this.view.open) this.view.close()
    this.say("")
  }

  say(sentence) {
    this.sayings.forEach(place => { place.textContent = sentence })
  }
}
