"""Looking for the waveform."""
