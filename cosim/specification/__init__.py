"""What each block must meet: from a target infidelity, or a target assignment error, to limits."""
