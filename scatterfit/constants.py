"""Physical constants, exact since the 2019 revision of the SI (CODATA 2018)."""

AVOGADRO = 6.02214076e23
"""Avogadro constant [1/mol], exact."""

BOLTZMANN = 1.380649e-23
"""Boltzmann constant [J/K], exact."""

GAS_CONSTANT = AVOGADRO * BOLTZMANN
"""Molar gas constant [J/(mol K)], exact."""

STANDARD_PRESSURE = 101325.0
"""Standard atmosphere [Pa], by definition."""

ICE_POINT = 273.15
"""Zero of the Celsius scale [K], by definition."""
