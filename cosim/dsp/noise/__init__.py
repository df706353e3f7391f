"""Noise as arrays over time and frequency: densities, oscillators, thermal noise, sample paths."""
