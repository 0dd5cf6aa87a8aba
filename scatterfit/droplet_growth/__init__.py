"""Gas state from pressure; radius against time with heat, vapour, curvature, depletion."""
