"""Physics, mathematics and image arithmetic: arrays in, arrays out."""
