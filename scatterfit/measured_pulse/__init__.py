"""One pulse's result: radius, rate, number by each handle, nucleation conditions, budget."""
