"""ohmward tests trays of passive components from one written sequence."""

__version__ = "0.1.0"
