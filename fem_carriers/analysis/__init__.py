"""Solved state to numbers: solution, ledger, profiles, collection probability."""
