"""Measures spatial-modulation radio links from captured IQ recordings (SigMF)."""

__version__ = "0.1.0"
