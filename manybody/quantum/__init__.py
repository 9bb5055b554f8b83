"""The quantum branch: ground energies of spin operators, their errors and rigorous bounds."""
