"""Many pulses: J(S, T), slopes, theory, activation."""
