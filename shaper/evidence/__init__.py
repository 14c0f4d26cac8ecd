"""What a waveform is worth, and how one can know."""
