"""Analysis: runs in, answers out; nothing is run, read or drawn here."""
