"""Parametric shapes of the trade, one family a file."""
