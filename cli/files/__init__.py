"""One module per file format that a measurement is written to."""
