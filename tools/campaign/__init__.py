"""Measuring campaigns: how true, how fast and how small the program is."""
