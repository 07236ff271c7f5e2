"""The way back: from moduli to the molar-mass distribution, with what the data can carry."""
