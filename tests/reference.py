"""Published and independently computed check values, read from data/reference_values.csv."""

import csv
import functools
import math
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

TABLE = Path(__file__).parent.parent / "data" / "reference_values.csv"


@dataclass(frozen=True)
class Reference:
    """One row: `value` with absolute `uncertainty` (0 where the row gives none), and where it comes from."""

    id: str
    quantity: str
    model: str
    N: str
    S: str
    boundary: str
    value: float
    uncertainty: float
    kind: str
    source: str

    @property
    def sites(self) -> int:
        return int(self.N)

    @property
    def spin(self) -> float:
        return float(Fraction(self.S))

    def digits(self, computed: float) -> float:
        """Matched digits: -log10 of the relative deviation (absolute where the value is zero), at most 16."""
        deviation = abs(computed - self.value) / (abs(self.value) or 1.0)
        return 16.0 if deviation < 1e-16 else -math.log10(deviation)


@functools.cache
def table() -> dict[str, Reference]:
    rows = {}
    with TABLE.open(newline="", encoding="utf-8") as file:
        for row in csv.DictReader(file):
            number = row["uncertainty"].strip()
            rows[row["id"]] = Reference(**{**row, "value": float(row["value"]), "uncertainty": float(number or 0)})
    return rows


def reference(identifier: str) -> Reference:
    return table()[identifier]
