"""One file per command of the command line."""
