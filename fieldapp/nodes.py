"""What a folder's node is made into: a central, known to itself by an enrolment of its own."""

from fieldapp.domain.facts import DeviceEnrolled, Fact
from fieldapp.domain.recorded import Reading
from fieldapp.identity import new_act
from fieldapp.projections.pages import Pages
from fieldapp.store import Store
from sync.encoding import b64

CENTRAL_PLACES = ("desk", "bench")


def become_central(store: Store) -> None:
    """Open Desk, Bench and the door here; on the first start enter this node among the devices."""
    store.act(new_act(), {"central": store.dev}, lambda p, r: _enrolment(store, p, r), by="")
    with store.transaction():
        store.put("central", "yes")
        store.put("places", " ".join(CENTRAL_PLACES))


def _enrolment(store: Store, pages: Pages, _reading: Reading) -> list[Fact]:
    key = b64(store.key.public)
    if pages.row("SELECT 1 FROM p_device WHERE dev = ? AND public_key = ?", (store.dev, key)):
        return []
    return [DeviceEnrolled(dev=store.dev, public_key=key, places=CENTRAL_PLACES)]
