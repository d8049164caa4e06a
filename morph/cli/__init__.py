"""The command line: one file per sub-command; parses, calls the pipeline, prints."""
