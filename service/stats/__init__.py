"""Pure mathematics of the decision: arrays in, frozen results out."""
