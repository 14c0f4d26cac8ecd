"""What stands between the numbers and the qubit: bound, sample clock, codes, line."""
