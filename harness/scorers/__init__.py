"""Scorers: numbers computed from a true network and a learned graph."""
