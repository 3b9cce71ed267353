"""Sans-I/O codecs: a driver's commands into bytes, an instrument's bytes into values."""
