"""The questions people ask: predictions with bands, blends, tails, sheets, waiting times."""
