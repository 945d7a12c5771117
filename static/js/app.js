// Starts every behaviour of the page. Without scripts the page works as plain forms.

import { startBusy } from "./busy.js"
import { startCamera } from "./camera.js"
import { startCountdowns } from "./countdown.js"
import { startReadback } from "./readback.js"
import { startResend } from "./resend.js"
import { startRing } from "./ring.js"
import { startScan } from "./scan.js"
import { startWakeLock } from "./wakelock.js"

startBusy(document)
startResend(document)
startScan(document)
startCamera(document)
startReadback(document)
startRing(document)
startWakeLock(document)
startCountdowns(document)
