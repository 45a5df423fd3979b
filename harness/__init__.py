"""The harness: learners, scorers, plans, ledgers, execution, analysis and reports.

Kept free of imports: `arcassay --help` must not pay for numpy.
"""
