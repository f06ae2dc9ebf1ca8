"""Physics only: arrays in, arrays out."""
