"""Commands: one file each, thin: parse, call, print."""
