"""What the melt is: molar-mass distributions and polymer constants."""
