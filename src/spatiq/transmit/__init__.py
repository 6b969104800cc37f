"""Reference waveforms; channel and front-end simulation."""
