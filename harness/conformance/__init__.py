"""Conformance: the checks that every learner must pass, built-in or not.

A check is a function of one learner that states one fact about it; `checks` runs them and makes records.
"""
