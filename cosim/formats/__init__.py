"""The file wing: measured and simulated data of other programs, as waveforms and lines."""
