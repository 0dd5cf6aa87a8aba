"""The bench as checked records: beam, detectors, chamber, vapour, gas; uncertainties."""
