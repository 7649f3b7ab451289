"""The experiment file: its keys, its loader, and the run of one experiment from end to end."""
