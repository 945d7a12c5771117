"""The command line. Exit 0 done, 1 the answer is no, 2 wrong use; errors are one sentence.

Heavy parts are imported by the command that needs them, so that ``--help`` and a tablet's start
stay quick.
"""

from fieldapp.cli import evidence, nodes, plan, protocols, rehearsals
from fieldapp.cli.shared import main

__all__ = ["evidence", "main", "nodes", "plan", "protocols", "rehearsals"]
