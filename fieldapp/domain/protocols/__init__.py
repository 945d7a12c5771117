"""The protocols that ship with the program, how one is read, and what the step engine answers."""

from fieldapp.domain.protocols.document import BadProtocol as BadProtocol
from fieldapp.domain.protocols.document import Fault as Fault
from fieldapp.domain.protocols.model import Draw as Draw
from fieldapp.domain.protocols.model import Protocol as Protocol
from fieldapp.domain.protocols.model import find as find
from fieldapp.domain.protocols.model import read_protocol as read_protocol
from fieldapp.domain.protocols.model import shipped as shipped
