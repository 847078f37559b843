"""What a person runs: the command line, one replay, results on disk."""
