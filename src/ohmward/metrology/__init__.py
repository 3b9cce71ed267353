"""Pure arithmetic of measurement: arrays in, arrays out, nothing read and nothing waited for."""
