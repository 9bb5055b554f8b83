"""manybody: the gap between quantum and classical ground energies of interacting moments.

Everything for a notebook is reachable from here and loaded when first used:

    import manybody as mb

    lattice = mb.square([4, 4], periodic=True)
    f = mb.exchange(lattice.sites, lattice.pairs("nearest"), 1.0)
    tree = mb.run(mb.study_from_functions([f], spins=["1/2", 1], rules=["wick"]), "square")
    print(tree["relative_gap"])
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
    "classical.minimize": ("MinimizeSettings", "minimize"),
    "classical.certificate": ("CertificateSettings", "certify"),
    "classical.search": ("find_ground_state",),
    "classical.harmonic": ("harmonic_correction",),
    "quantum.result": ("GroundState", "QuantumSettings"),
    "quantum.ground_state": ("ground_state",),
    "quantum.product_state": ("product_energy",),
    "quantum.bounds": ("cluster_bound",),
    "workflow.problems": ("DocumentError",),
    "workflow.document": ("Settings", "read_document"),
    "workflow.points": ("expand", "study_from_functions"),
    "workflow.study": ("plan", "run"),
    "results.dataset": ("open_results", "points_table"),
    "results.scaling": ("scaling_dataset", "trust_spin"),
}
_NAMES = {name: f"manybody.{home}" for home, names in _HOMES.items() for name in names}

__all__ = ["__version__", *_NAMES]


def __getattr__(name: str):
    if name in _NAMES:
        return getattr(importlib.import_module(_NAMES[name]), name)
    raise AttributeError(f"module 'manybody' has no attribute {name!r}")


def __dir__():
    return sorted(__all__)
