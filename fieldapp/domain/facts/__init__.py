"""Every kind of fact, a module a place; ``KINDS`` is the registry."""

from fieldapp.domain.facts.base import ALL as ALL
from fieldapp.domain.facts.base import CENTRAL as CENTRAL
from fieldapp.domain.facts.base import KINDS as KINDS
from fieldapp.domain.facts.base import ROUTE as ROUTE
from fieldapp.domain.facts.base import ROUTE_LAB as ROUTE_LAB
from fieldapp.domain.facts.base import Done as Done
from fieldapp.domain.facts.base import Fact as Fact
from fieldapp.domain.facts.bench import *  # noqa: F403 - a package of plain classes, re-exported
from fieldapp.domain.facts.custody import *  # noqa: F403
from fieldapp.domain.facts.desk import *  # noqa: F403
from fieldapp.domain.facts.kitchen import *  # noqa: F403
from fieldapp.domain.facts.ledger import *  # noqa: F403
from fieldapp.domain.facts.plan import *  # noqa: F403
