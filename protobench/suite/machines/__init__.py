"""Machines of the contract, sequences derived from them, and the driving of a module through these."""
