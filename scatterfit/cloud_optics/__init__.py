"""One droplet's light: Mie cross sections over the aperture, extinction, kernel table, extrema."""
