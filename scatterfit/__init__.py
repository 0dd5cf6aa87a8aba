"""Droplet radius, growth rate and number from light scattered in an expansion chamber."""
