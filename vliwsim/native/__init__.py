"""The fast engine: pipeline contexts as machine code, with data where the graph of contexts has conditions."""
