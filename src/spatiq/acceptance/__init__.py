"""Acceptance of a transmitter: figures, limits, verdicts, probable causes."""
