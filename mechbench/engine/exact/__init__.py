"""Measures by quadrature over order statistics, with error bounds."""
