"""What a person sets up before a run: bench, drivers and parts, read and checked."""
