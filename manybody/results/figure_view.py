"""What a figure looks at: a tree, one choice of lattice and parameters, and a normalization of energies."""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from manybody.results.normalization import factor


class NotDrawn(Exception):
    """The dataset lacks what the figure needs; the message is the reason shown to the user."""


@dataclass(frozen=True)
class View:
    """place: {dimension: position} of the lattice and of every parameter; empty dimensions are not in it."""

    tree: Any
    normalization: str
    place: dict

    @cached_property
    def root(self):
        return self.tree.dataset

    @cached_property
    def point(self):
        """Root variables at the chosen lattice and parameters: dims sites, spin, rule only."""
        return self.root.isel(self.place)

    @cached_property
    def scaling(self):
        """The scaling group, or an empty Dataset."""
        import xarray as xr

        return self.tree["scaling"].dataset if "scaling" in self.tree.children else xr.Dataset()

    @cached_property
    def factor(self):
        return factor(self.root, self.normalization)

    @property
    def unit(self):
        return self.root["gap"].attrs.get("units", "1")

    @property
    def spins(self):
        return self.root["spin"].values

    @property
    def rules(self):
        return self.root["rule"].values.tolist()

    @property
    def sites(self):
        return self.root["sites"].values

    def energy(self, name):
        """An energy variable at the chosen place, times the normalization's factor."""
        return (self.point[name] * self.factor).transpose("sites", "spin", "rule")

    def usable(self):
        """Points that have an energy."""
        return np.isfinite(self.point["quantum_energy"]) & (self.point["status"] <= 1)

    def where(self) -> str:
        """The choice in words, "" where there was none to make."""
        chosen = []
        for name, position in self.place.items():
            value = self.root[name].values[position]
            if self.root.sizes[name] > 1 or name != "lattice":
                chosen.append(f"{name} = {value:g}" if name != "lattice" else str(value))
        return ", ".join(chosen)

    def note(self) -> str:
        """The end of a caption: which of several parameter sets is shown."""
        several = [name for name in self.place if self.root.sizes[name] > 1]
        return f" Shown at {self.where()}; the study has more." if several else ""


def look(tree, normalization="energy", select=None) -> View:
    """A View of the tree; select: {dimension: value} for lattice and parameters, the first value otherwise.

    Raises ValueError for a dimension or value the study does not have, NormalizationError as normalization.factor.
    """
    root = tree.dataset
    free = [d for d in root["classical_energy"].dims if d != "sites"]
    place = dict.fromkeys(free, 0)
    for name, value in (select or {}).items():
        if name not in free:
            raise ValueError(
                f"{name!r} is no lattice or parameter of this study; choose among {', '.join(free) or 'none'}"
            )
        values = root[name].values.tolist()
        if value not in values:
            raise ValueError(f"{name} = {value!r} is not in the study; choose among {values}")
        place[name] = values.index(value)
    factor(root, normalization)
    return View(tree, normalization, place)
