"""The proof bench: simulated ramps with known truth, an oracle, and the table of what was kept.

Nothing here is taken from ``analyse`` or from the simulated laboratory of ``acquire``; formulas,
filter and random draws are written apart, so that a fault in one can't hide in the other. Only
:mod:`bench.trial` imports ``analyse``: it is the party under test.
"""
