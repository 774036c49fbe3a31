"""The command line: one thin module per command, joined in ``app``."""
