"""manybody: the gap between quantum and classical ground energies of interacting moments.

Everything for a notebook is reachable from here and loaded when first used:

    import manybody as mb
    lattice = mb.square([4, 4], periodic=True)
    f = mb.exchange(lattice.sites, lattice.pairs("nearest"), 1.0)
    study = mb.study_of({16: f}, spins=["1/2", 1], rules=["wick"])
    results = mb.run(study, "square")
"""

import importlib

__version__ = "0.1.0"

_HOMES = {
    "model.lattice": (
        "Lattice",
        "bipartite",
        "chain",
        "complete",
        "cubic",
        "honeycomb",
        "kagome",
        "ladder",
        "lattice",
        "ring",
        "square",
        "star",
        "table",
        "triangular",
    ),
    "model.energy": ("EnergyFunction", "Group"),
    "model.couplings": (
        "anisotropy",
        "antisymmetric",
        "biquadratic",
        "exchange",
        "field",
        "product",
        "site_function",
    ),
    "model.quantization": ("RULES", "SpinOperator", "UndefinedQuantization", "quantize"),
}
_NAMES = {name: f"manybody.{home}" for home, names in _HOMES.items() for name in names}

__all__ = ["__version__", *_NAMES]


def __getattr__(name: str):
    if name in _NAMES:
        return getattr(importlib.import_module(_NAMES[name]), name)
    raise AttributeError(f"module 'manybody' has no attribute {name!r}")


def __dir__():
    return sorted(__all__)
