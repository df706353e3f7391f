"""From the records of a readout chain to decisions and their errors; it knows no qubits."""
