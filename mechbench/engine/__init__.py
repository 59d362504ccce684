"""Measures of manipulability, revenue and welfare: exact integration and simulation."""
