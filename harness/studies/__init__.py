"""Studies: the only place where execution and analysis meet."""
