"""Figures with their uncertainty; predictions from theory."""
