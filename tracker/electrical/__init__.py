"""Ratio, power and per-unit arithmetic: arrays in, arrays out, no I/O."""
