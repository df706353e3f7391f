"""The circuit wing: decks and their simulation in volts and amperes; it knows nothing of qubits."""
