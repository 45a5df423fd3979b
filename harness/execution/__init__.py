"""Execution: the ledger's missing runs, done under limits, by processes that are watched from outside.

Three kinds of process. The *main* one decides what is missing, hands out work and writes the ledger.
A *supervisor* per worker never runs a learner itself: it forks, watches and, at a limit, kills. A
*runner*, forked from it, draws networks and datasets, calls learners and scores; it lives on from run
to run for built-in learners and for one run only for anybody else's.
"""
