"""Published energies that can be laid over a figure where model and spin are the same: published.csv.

Values are energies per site in the limit of many sites of H = sum over nearest pairs of Sx Sx + Sy Sy + anisotropy Sz
Sz, each with its citation. A dataset is matched by its own workflow text, nothing is guessed: one lattice of a listed
shape, one term, nearest pairs, one exchange number (or two equal components).
"""

import csv
import tomllib
from dataclasses import dataclass
from fractions import Fraction
from importlib import resources

from manybody.results.normalization import PAIR_FACTORS

_SHAPES = {"chain": "chain", "ring": "chain"}


@dataclass(frozen=True)
class Published:
    """value and uncertainty: energy per site of the function on unit vectors, in the user's unit."""

    spin: float
    rule: str
    value: float
    uncertainty: float
    citation: str


def matching(root) -> list[Published]:
    """The published limits that belong to this study, one per spin and rule that it has; empty where none does."""
    model = _model(root.attrs.get("workflow", ""))
    if model is None:
        return []
    lattice, coupling, anisotropy = model
    found = []
    with resources.files(__package__).joinpath("published.csv").open(newline="", encoding="utf-8") as file:
        for row in csv.DictReader(file):
            spin = float(Fraction(row["spin"]))
            same = row["lattice"] == lattice and abs(float(row["anisotropy"]) - anisotropy) < 1e-12
            if not same or spin not in root["spin"].values:
                continue
            for rule in root["rule"].values.tolist():
                scale = coupling / PAIR_FACTORS[rule](spin)
                found.append(
                    Published(
                        spin, rule, float(row["value"]) * scale, float(row["uncertainty"]) * scale, row["citation"]
                    )
                )
    return found


def _model(text):
    """(shape, coupling > 0, anisotropy) if the workflow is one of the published models, else None."""
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return None
    lattice, terms = document.get("lattice"), document.get("term")
    if not isinstance(lattice, dict) or not isinstance(terms, list) or len(terms) != 1:
        return None
    if set(terms[0]) - {"pair", "exchange"} or terms[0].get("pair", "nearest") != "nearest":
        return None
    exchange = terms[0].get("exchange")
    if isinstance(exchange, list):
        if len(exchange) != 3 or not all(isinstance(j, (int, float)) for j in exchange) or exchange[0] != exchange[1]:
            return None
        coupling, along = float(exchange[0]), float(exchange[2])
    elif isinstance(exchange, (int, float)) and not isinstance(exchange, bool):
        coupling = along = float(exchange)
    else:
        return None
    shape = lattice.get("shape", "")
    if coupling <= 0 or not isinstance(shape, str):
        return None
    return _SHAPES.get(shape, shape), coupling, along / coupling
