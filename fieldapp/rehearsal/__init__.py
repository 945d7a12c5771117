"""Rehearsals: walk a route headless between throwaway nodes over real HTTP."""

from fieldapp.rehearsal.account import Account as Account
from fieldapp.rehearsal.walk import rehearse as rehearse
