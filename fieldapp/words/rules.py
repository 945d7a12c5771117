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
    "reason-missing": N_(
        "Say why in a few words: a bottle is never held or refused without a reason."
    ),
    "number-taken": N_(
        "Your number {number} stands on bottle {other} already. Look at both stickers, then "
        "type the number of this one."
    ),
    "too-late-to-take-back": N_(
        "Another bottle was received since. Record what is right now; the earlier entry stays"
        " beside it."
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
}
