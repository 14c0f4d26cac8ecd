"""What the drive does to the qubit."""
