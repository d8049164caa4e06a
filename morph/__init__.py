"""morph: from an optimiser's flat density image to a checked, printable mould insert."""
