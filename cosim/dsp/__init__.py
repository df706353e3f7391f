"""The signal wing: arrays over time; it knows neither netlists nor qubits."""
