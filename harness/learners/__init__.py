"""Learners: what one is, the built-in methods, and how others are found."""
