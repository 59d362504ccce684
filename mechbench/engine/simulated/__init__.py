"""Measures by drawing the bids that decide, with 95 % intervals; `simulate` is the one door."""
