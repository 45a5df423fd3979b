"""Execution: the ledger's missing runs, done under limits, by processes that are watched from outside.

Three kinds of process. The *main* one decides what is missing, hands out work and writes the ledger.
A *supervisor* per worker never runs a learner itself: it forks, watches and, at a limit, kills. *Runners*
are forked from it and call learners. The steady one lives on from run to run of built-in learners: it
draws networks and datasets and scores. Anybody else's learner gets a runner for one run only; what it
is given is drawn, and its answer is scored, by the supervisor.
"""
