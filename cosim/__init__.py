"""From circuit netlists to qubit dynamics."""
