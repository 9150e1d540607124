"""The command line, through its own runner and as real processes, on good and on awkward input."""
