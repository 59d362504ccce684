"""The market: who bids, for what, and under which reserve; and the file that describes it."""
