"""The quantum wing: matrices and rad/s; it knows nothing of volts."""
