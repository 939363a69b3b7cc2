"""What the records mean: pure functions of arrays, without clock, file, network or database."""
