"""The receiving chain: one stage a file, named and ordered as the data flows."""
