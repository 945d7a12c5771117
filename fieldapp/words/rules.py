"""The sentence of each broken rule; ``kind-why`` stands before ``kind`` where a rule says why."""

from fieldapp.words.marks import N_

RULES: dict[str, str] = {
    "rule-broken": N_(
        "This cannot be recorded as it is. Go back and look at the step that is due."
    ),
    "not-due": N_("That step is not due yet. The step that is due now is shown."),
    "step-over": N_("That was recorded already at {at}. The present step is shown."),
    "unknown": N_("This device does not know {what} {name}. Send and fetch, then try again."),
    "act-differs": N_(
        "That press was recorded at {at} with other answers. Look at what stands, and correct"
        " it there if it is wrong."
    ),
    "no-person": N_("Say first who holds this device: choose your name on the first page."),
    "no-protocol": N_(
        "The protocol {protocol} of this visit has not reached this device. Send and fetch, "
        "then open the visit again."
    ),
    "not-yet": N_("{stated} lies ahead of this device's clock. Give a time that has passed."),
    "strange-answer": N_("{answer} is no answer to this question. Choose one of those shown."),
    "not-started": N_("This visit has not begun. Open it first."),
    "bad-code": N_("{code} is no bottle code. Read it from the label again."),
    "bad-code-character": N_(
        "{character}, at place {place}, is in no bottle code. Read the label again, or scan it."
    ),
    "bad-code-length": N_(
        "A bottle code has {wanted} characters; this has {length}. Read it again."
    ),
    "bad-code-check": N_(
        "One character is wrong, or two are swapped: the last one does not agree. Read the "
        "label again, or scan it."
    ),
    "bad-time": N_("{value} is no time. Type a date and a time, as 2031-05-04T06:30."),
    "no-such-local-time": N_(
        "No clock showed {local} there: the clocks went forward over it. Give the time after."
    ),
    "ambiguous-local-time": N_(
        "The clocks showed {local} twice that night. Say whether the first or the second is meant."
    ),
    "strange-deviation": N_("{deviation} is nothing this device knows. Choose one of those shown."),
    "name-missing": N_("Type the name of whoever signs."),
    "not-yours": N_("{by} recorded that press. Only the person who made it takes it back."),
    "taken-back-late": N_(
        "Something else was recorded since. This press stays; what is wrong in it is "
        "corrected, not taken back."
    ),
    "bottles-waiting": N_(
        "Water stands or runs in this visit: draws {draws} are set and not filled. Say what "
        "became of them, then close."
    ),
    "wrong-bottle": N_(
        "{code} is for draw {draw} at {site}. Draw {wanted} of this visit is due: take its "
        "bottle, or a spare."
    ),
    "already-filled": N_("{code} was filled already, at {site}, draw {draw}, {filled_at}."),
    "bottle-void": N_("{code} was taken out of use ({why}). Take another bottle."),
    "lot-missing": N_("Type the lot that is printed on the water for the blank."),
    "nothing-done": N_("Say of at least one draw what became of it."),
    "no-such-draw": N_("This visit has no draw {draw}."),
    "crossed-times": N_("The first time is later than the second. Exchange them."),
    "nothing-said": N_("Choose when water last ran, or say that nobody knows."),
    "not-correctable": N_(
        "That is not corrected. Record what is right beside it, or settle the finding."
    ),
    "not-yours-to-correct": N_(
        "Whoever recorded it corrects it, or the coordinator. Tell them what is right."
    ),
    "corrected-since": N_(
        "It was corrected or taken back since this page was drawn. Look at what stands now."
    ),
    "correction-unsaid": N_("Say in a few words why it is corrected."),
    "nothing-differs": N_("Nothing here differs from what is recorded, so nothing was corrected."),
    "volume-out-of-range": N_(
        "{value} is no volume of a bottle. Type millilitres, or leave it empty if nobody measured."
    ),
    "number-in-use": N_(
        "The laboratory's number {number} stands on bottle {other} already. Look at both stickers."
    ),
    "run-unsaid": N_("Say when the tap was opened and when it was shut."),
    "reason-missing": N_(
        "Say why in a few words: a bottle is never held or refused without a reason."
    ),
    "number-taken": N_(
        "Your number {number} stands on bottle {other} already. Look at both stickers, then "
        "type the number of this one."
    ),
    "too-late-to-take-back": N_(
        "Something else was recorded since. Record what is right now; the earlier entry stays"
        " beside it."
    ),
    "nothing-to-take-back": N_(
        "There is nothing to take back: your last receipt was taken back already, or none came"
        " since. To take back an earlier one, say what is right now."
    ),
    "number-is-card": N_(
        "{number} is a card of the counter, not a number of yours. Scan the sticker, then the card."
    ),
    "bad-picture": N_("That cannot be kept as a picture. Photograph it again."),
    "bad-picture-empty": N_("No picture came. Choose or take one, then send it again."),
    "bad-picture-too-large": N_(
        "That file is larger than {most_mb} MB. Take the picture with a smaller size."
    ),
    "bad-picture-no-picture": N_(
        "That is no picture this device can read. Send a JPEG, a PNG or a WebP."
    ),
    "bad-picture-heic": N_(
        "That is a HEIC picture, which this device cannot read. Set the camera to save JPEG, or "
        "take the picture from this page."
    ),
    "bad-picture-too-many-pixels": N_(
        "That picture has more than {most_mp} million pixels. Take it with a smaller size."
    ),
    "bad-picture-damaged": N_(
        "That picture is damaged or cut short. Take it again; nothing was kept of it."
    ),
    "strange-subject": N_(
        "A photo here is of the visit, of one of its bottles or of a difference that was noted. "
        "Choose one of those shown."
    ),
    "no-room": N_(
        "The disk has too little room left for photos, so this one was not kept. Everything else "
        "is still recorded. Free some space, then take it again."
    ),
    "no-code-seen": N_(
        "No bottle code can be read in that picture. Hold the label flat and near, or type the "
        "code."
    ),
    "no-code-seen-several": N_(
        "That picture shows {count} bottle codes. Photograph one label alone, or type its code."
    ),
    "no-code-seen-other": N_(
        "The code in that picture is of no bottle: it says “{text}”. Photograph the bottle's own "
        "label."
    ),
    "other-cooler": N_(
        "By its record bottle {bottle} lies in another cooler. Say whether it is kept here or set"
        " aside."
    ),
    "seal-unsaid": N_(
        "Type the number on the seal as you read it, or say that it is broken or missing."
    ),
    "result-stands": N_(
        "A result of bottle {bottle} is in already. Whether it is analysed can only be "
        "decided before any result exists; ask the regulator if a result must not count."
    ),
    "not-held": N_(
        "Bottle {bottle} is not held at the Bench. Only a held bottle waits for this decision."
    ),
    "not-yet-a-finding": N_(
        "That is still on its way until {until}. It becomes a finding then if nothing arrives."
    ),
    "bottle-in-use": N_(
        "Bottle {bottle} was filled or received, so its code cannot be voided. Refuse or hold"
        " the bottle at the Bench instead."
    ),
    "no-such-person": N_("{person} is no person of any round here. Known are: {known}."),
    "round-known": N_(
        "The round {round} is known and this file differs from it. Look at the differences, "
        "then import it again with --amend."
    ),
    "nothing-to-print": N_("No bottle of route {route} needs a label."),
    "route-not-here": N_(
        "This node did not import the round of route {route}, so it issues no codes for it. "
        "Send and fetch first, or print where the round was imported."
    ),
    "taken-elsewhere": N_(
        "{what} {name} belongs to the round {round} already. Give it an id of its own in this file."
    ),
    "bad-zone": N_("{zone} is no zone of the time-zone database. Write one like America/Boise."),
    "bad-duration": N_(
        "{value} is no length of time that is the same everywhere. Write days, hours or "
        "minutes, as PT48H or P14D."
    ),
    "bad-level": N_("{value} is no level. Write a number such as 3.2, <1 or ND, and its unit."),
    "bad-rule": N_("The rule document is wrong at {path}: {value}. {why}"),
    "bad-protocol": N_(
        "The protocol document is wrong. Run 'tapwitness protocol check' on it for every fault."
    ),
    "bad-file": N_("{file} has {count} faults and nothing of it was taken. They are listed below."),
    "unknown-convention": N_(
        "{convention} is no convention for a rank. Name interpolate, half-up, half-even or ceiling."
    ),
    "convention-silent": N_(
        "The convention {convention} says nothing for {n} results. Name another."
    ),
    "box-missing": N_("Say into which box: type the number painted on the cooler."),
    "box-closed": N_("Cooler {box} is sealed. Open it again with a reason, or take another box."),
    "nothing-to-pack": N_("Every filled bottle of this route has its place. Seal the cooler."),
    "bottle-empty": N_(
        "By the record {code} holds no water. Finish its visit first, or say that it is filled."
    ),
    "in-sealed-cooler": N_(
        "{code} lies in cooler {box}, which is sealed. Open that one again first, with a reason."
    ),
    "cooler-bare": N_("No bottle is in cooler {box} yet. Put the bottles in first."),
    "seal-missing": N_("Type or scan the number on the seal."),
    "seal-used": N_("Seal {number} is or was on cooler {box}. Read the number again."),
    "bottles-loose": N_("In no cooler: {codes}. Put them in, or say where they are; then seal."),
    "count-other": N_(
        "Counted: {counted}. By the record {packed} are in it. Count again, or scan what is "
        "missing."
    ),
    "not-sealed": N_("Cooler {box} bears no seal. Seal it first, then hand it over."),
    "why-missing": N_("Say in a few words why the seal was broken."),
    "waybill-missing": N_("Type the courier's waybill, or the name of whoever takes it."),
    "nobody-named": N_("Type the name of whoever signed for the laboratory."),
    "nothing-came": N_("Mark at least one bottle that came."),
    "number-twice": N_(
        "The laboratory's number {number} stands on bottle {other} already. Read the sheet again."
    ),
    "not-that-late": N_("{on} is still to come. Type the day that stands on the sheet."),
    "several-coolers": N_(
        "{count} coolers bear the number {box}. Name the route as well, or the cooler's id."
    ),
}
