"""Into the memory of an arbitrary waveform generator, by open standards and without surprises."""
