"""What a reader sees: the first screen and the record."""
