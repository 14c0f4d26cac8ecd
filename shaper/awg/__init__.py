"""Into the memory of an arbitrary waveform generator."""
