"""The record of a run in one SQLite file: what was said and done, from which all else derives."""
