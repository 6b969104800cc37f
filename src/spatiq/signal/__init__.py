"""Mathematics of both ends: constellations, sequences, pulses, bit fields, codebooks. No I/O."""
