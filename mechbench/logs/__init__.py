"""Bid logs: reading them in bounded memory and turning them into a family of values."""
