"""The classical branch: minima of an energy function on a product of spheres, their proof and their fluctuations."""
