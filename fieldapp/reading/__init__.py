"""Files that people bring: rounds with their routes, and the laboratory's results.

A file is read whole before anything is made of it. All its faults come at once, in ``BadFile``;
what is merely worth knowing comes beside the facts, as notes.
"""

from fieldapp.reading.difference import Change as Change
from fieldapp.reading.difference import difference as difference
from fieldapp.reading.difference import to_append as to_append
from fieldapp.reading.faults import BadFile as BadFile
from fieldapp.reading.faults import FileFault as FileFault
from fieldapp.reading.faults import Note as Note
from fieldapp.reading.results import ResultRow as ResultRow
from fieldapp.reading.results import ResultsFile as ResultsFile
from fieldapp.reading.results import read_results as read_results
from fieldapp.reading.rounds import RoundFile as RoundFile
from fieldapp.reading.rounds import read_round as read_round
