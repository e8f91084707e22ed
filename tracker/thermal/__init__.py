"""Heat and aging of oil-immersed transformers: arrays in, arrays out, no I/O."""
