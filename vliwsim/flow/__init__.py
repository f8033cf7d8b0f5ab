"""The graph of pipeline contexts: everything a schedule can be in the middle of, whatever its data."""
