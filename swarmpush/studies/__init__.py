"""Studies: one scenario at many points, several runs each."""
