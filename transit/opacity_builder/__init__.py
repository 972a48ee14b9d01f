"""Computes the opacity tables from line lists, band means and collision data; not needed to use the tables."""
