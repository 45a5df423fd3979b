"""The ledger: the SQLite file that holds every run of a plan, and the only state there is."""
