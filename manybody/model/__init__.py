"""What is studied: lattices, energy functions on products of spheres, and their quantization."""
