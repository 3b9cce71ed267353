"""Carries a brief out on an open bench: the runner, its record, and going on after a stop."""
