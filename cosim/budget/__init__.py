"""The error budget of a simulated waveform: what each of its imperfections costs."""
