"""What the instrument gave: sweeps, relaxation and flow curves, and what can be said of them."""
