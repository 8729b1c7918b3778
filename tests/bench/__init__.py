"""Benchmarks: ratios and achieved accuracy side by side, measured in one run. Nothing here judges seconds.

``python -m tests.bench`` runs them all, ``python -m tests.bench NAME...`` some, ``--list`` names them, ``--quick`` cuts
the sizes and repeats down to a check that each one runs.
"""
