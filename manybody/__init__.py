"""manybody: the gap between quantum and classical ground energies of interacting moments."""

__version__ = "0.1.0"
