"""What follows from the recorded energies: the gap in its three forms and the verdict on the energy ladder.

Computed here and nowhere else, so that tables, figures and files cannot differ.
"""

import numpy as np

from manybody.results.schema import VARIABLES

ROUNDING = 1e-9
"""Energies that differ by less than this fraction of the energy scale count as equal: both branches round."""


def fill(root, unit):
    """The dataset with gap, gap_per_site, relative_gap and ladder added; energies in `unit`."""
    import xarray as xr

    f_min, e = root["classical_energy"], root["quantum_energy"]
    gap = (e - f_min).transpose(*e.dims)
    scale = energy_scale(root)
    new = {
        "gap": gap,
        "gap_per_site": (gap / root["sites"]).transpose(*e.dims),
        "relative_gap": (gap / scale.where(scale > 0)).transpose(*e.dims),
        "ladder": ladder(root),
    }
    out = root.copy()
    for name, values in new.items():
        attrs = VARIABLES[name].attrs(unit)
        if name == "gap":
            attrs["ancillary_variables"] = "quantum_energy_error status"
        out[name] = xr.Variable(e.dims, values.data, attrs)
    return out


def energy_scale(root):
    """|f_min - f_mean|, zero where the difference is only rounding; carries no attributes."""
    f_min, f_mean = root["classical_energy"], root["classical_mean"]
    scale = abs(f_min - f_mean)
    scale = scale.where(~(scale <= 1e-12 * np.maximum(abs(f_min), abs(f_mean))), 0.0)
    scale.attrs = {}
    return scale


def ladder(root):
    """0 holds, 1 violated, -1 unknown: min u <= E <= product <= coherent and cluster bound <= E.

    The truth lies in [E - error, E]; a lower bound above E or a product energy below E - error contradicts it by more
    than the stated error. The point is unknown unless E and at least one other rung are there.
    """
    e = root["quantum_energy"]
    error = root["quantum_energy_error"].fillna(0.0)
    slack = ROUNDING * np.maximum(energy_scale(root).fillna(0.0), abs(e))
    checks = [
        (root["upper_symbol_energy"], e),
        (root["cluster_bound"], e),
        (e - error, root["product_energy"]),
        (e - error, root["coherent_energy"]),
        (root["product_energy"], root["coherent_energy"]),
    ]
    known = sum((low.notnull() & high.notnull()).astype(int) for low, high in checks[:4]) > 0
    broken = sum((low > high + slack).astype(int) for low, high in checks) > 0
    verdict = broken.astype(np.int8).where(known & e.notnull(), -1).astype(np.int8)
    return verdict.transpose(*e.dims)
