"""The one registry of dataset variables: name, dimensions, type, units and meaning.

Attributes, validation, tests and documentation all read VARIABLES. A new quantity of a point gets one entry here and
nothing else in this room has to change. Records (plain dicts, one per point) use the same names as keys.

Kinds of dimension, `Variable.per`:
    "cluster"  lattice, sites and the parameters: what does not depend on spin or rule
    "point"    the same, then spin and rule
    "rule"     the cluster's and rule
    "lattice"  lattice and sites only: geometry
Behind those come `Variable.dims`, the array dimensions of one value, padded to the longest in a study.

Flags: a record gives the meaning as text (or a bool for no/yes); the dataset stores its index. -1 is always the value
"not known", so that flag variables stay integers in memory and need no fill value.
"""

from dataclasses import dataclass, replace

CONVENTIONS = "CF-1.11"
COMPONENTS = ("x", "y", "z")

POINT_KEYS = ("lattice", "sites", "spin", "rule", "parameters")
"""What identifies a record beside its variables; lattice is "" where a study has one."""

# the last four are keywords of xarray's own selections: such a dimension could not be selected by keyword
_RESERVED = """
lattice sites spin rule site other_site component place cut stage pair end direction
parity power other_power within
method tolerance drop indexers
"""
RESERVED_NAMES = tuple(_RESERVED.split())
"""Names that a parameter may not take (nor that of any variable), because they are dimensions of the dataset."""


@dataclass(frozen=True)
class Variable:
    """One dataset variable.

    units: "energy" (the user's unit), "energy2" (its square), "1", "s", "bytes", or "" for flags and text.
    dtype: "float"; "count" (whole number, stored as int32; missing -> NaN in memory); "index" (whole number padded
    with -1, stays an integer); "flag"; "text".
    group: "" for the root of the tree, else the group's name.
    """

    name: str
    long_name: str
    per: str = "point"
    units: str = ""
    dtype: str = "float"
    dims: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    unknown: str = "unknown"
    group: str = ""
    derived: bool = False
    meaning: str = ""

    def flag_value(self, value) -> int:
        """Index of a flag given as its meaning, a bool or its index; raises ValueError naming what is allowed."""
        if isinstance(value, str):
            if value == self.unknown:
                return -1
            if value in self.flags:
                return self.flags.index(value)
        elif int(value) == value and -1 <= int(value) < len(self.flags):
            return int(value)
        raise ValueError(f"{self.name}: {value!r} is none of {', '.join(self.flags)}")

    def attrs(self, energy_unit: str) -> dict:
        """netCDF attributes under CF; `energy_unit` is the user's own, "1" where energies are dimensionless."""
        attrs = {"long_name": self.long_name}
        if self.meaning:
            attrs["comment"] = self.meaning
        if self.dtype == "flag":
            attrs["flag_values"] = [-1, *range(len(self.flags))]
            attrs["flag_meanings"] = " ".join((self.unknown, *self.flags))
        elif self.dtype != "text":
            attrs["units"] = units_text(self.units, energy_unit)
        return attrs


def units_text(kind: str, energy_unit: str) -> str:
    """The units attribute for a kind of units: "energy" -> "meV", "energy2" -> "meV2", others unchanged."""
    if kind in ("energy", "energy2") and energy_unit in ("", "1"):
        return "1"
    return {"energy": energy_unit, "energy2": f"{energy_unit}2"}.get(kind, kind)


_NO_YES = ("no", "yes")

_CLUSTER = (
    Variable(
        "classical_energy",
        "classical ground energy",
        units="energy",
        meaning="f_min, the lowest energy found on the product of spheres",
    ),
    Variable(
        "classical_energy_bound",
        "lower bound on the classical ground energy",
        units="energy",
        meaning="rigorous unless classical_bound_method says otherwise",
    ),
    Variable(
        "classical_certified",
        "classical minimum proved global",
        dtype="flag",
        flags=_NO_YES,
    ),
    Variable(
        "classical_bound_method",
        "how the classical bound was obtained",
        dtype="flag",
        flags=("multipliers", "relaxation", "clusters", "clusters_searched", "unfrustrated", "constant"),
        meaning="multipliers of the stationary point, optimal multipliers of the semidefinite relaxation, sum of "
        "exact minima of small clusters, sum of the lowest minima found of small clusters (not rigorous), every term "
        "at its own minimum, or a constant function",
    ),
    Variable("classical_mean", "sphere average of the energy function", units="energy", meaning="f_mean"),
    Variable("classical_minima", "distinct minima found", units="1", dtype="count"),
    Variable("classical_starts", "starts that were used", units="1", dtype="count"),
    Variable(
        "classical_gradient_norm",
        "relative gradient at the classical minimum",
        units="1",
        meaning="largest gradient at a site over the strongest sum of couplings at a site",
    ),
    Variable("classical_converged", "the minimizer converged", dtype="flag", flags=_NO_YES),
    Variable("classical_seconds", "time spent in the classical branch", units="s"),
    Variable("classical_message", "remark of the classical branch", dtype="text"),
)

_POINT = (
    Variable(
        "status",
        "state of the point",
        dtype="flag",
        flags=("converged", "not_converged", "undefined", "failed", "refused", "waiting"),
        unknown="absent",
        meaning="undefined: the rule has no operator at this spin; refused: too large for the memory allowed; waiting: "
        "not computed yet; absent: not part of the study",
    ),
    Variable("message", "what happened at the point, and what to try", dtype="text"),
    Variable(
        "quantum_energy",
        "quantum ground energy",
        units="energy",
        meaning="variational value, an upper bound; the truth lies in [quantum_energy - quantum_energy_error, "
        "quantum_energy] at 95 %",
    ),
    Variable(
        "quantum_energy_error",
        "one-sided 95 % error of the quantum ground energy",
        units="energy",
    ),
    Variable("quantum_method", "method of the quantum branch", dtype="flag", flags=("exact", "matrix_product")),
    Variable(
        "quantum_stop",
        "what ended the quantum branch",
        dtype="flag",
        flags=("accuracy", "max_bond", "memory", "sweeps"),
    ),
    Variable(
        "sector",
        "total spin projection of the ground state",
        units="1",
        meaning="along the conserved axis; missing where none is conserved",
    ),
    Variable("bond_dimension", "largest bond dimension", units="1", dtype="count"),
    Variable("discarded_weight", "discarded weight summed over bonds", units="1"),
    Variable("energy_variance", "variance of the energy in the state found", units="energy2"),
    Variable("quantum_seconds", "time spent in the quantum branch", units="s"),
    Variable(
        "upper_symbol_energy",
        "lower bound from the upper symbol",
        units="energy",
        meaning="min u, rigorous (Lieb 1973, Berezin 1972); the dual bound itself where the minimum is not certified",
    ),
    Variable(
        "upper_symbol_certified",
        "minimum of the upper symbol proved global",
        dtype="flag",
        flags=_NO_YES,
    ),
    Variable(
        "cluster_bound",
        "lower bound from exact energies of small clusters",
        units="energy",
        meaning="rigorous (Anderson 1951)",
    ),
    Variable(
        "cluster_bound_kind",
        "clusters behind the cluster bound",
        dtype="text",
    ),
    Variable("product_energy", "energy of the best product state", units="energy", meaning="full mean-field energy"),
    Variable(
        "coherent_energy",
        "energy of the best product of spin-coherent states",
        units="energy",
        meaning="min l, the minimum of the lower symbol",
    ),
    Variable(
        "harmonic_energy",
        "classical energy with the first quantum correction",
        units="energy",
        meaning="f_min + e_1/S; not a bound",
    ),
    Variable(
        "harmonic_coefficient",
        "coefficient e_1 of the first quantum correction",
        units="energy",
        meaning="E = f_min + e_1/S + ...",
    ),
    Variable(
        "harmonic_spread",
        "spread of e_1 over tied classical minima",
        units="energy",
        meaning="largest minus smallest e_1 among the minima compared",
    ),
    Variable("harmonic_zero_modes", "zero modes at the classical minimum", units="1", dtype="count"),
    Variable("harmonic_message", "remark of the harmonic rung", dtype="text"),
    Variable(
        "ladder",
        "order of the energy ladder",
        dtype="flag",
        flags=("holds", "violated"),
        derived=True,
        meaning="min u <= E <= product <= coherent and cluster bound <= E, within stated errors; violated means that "
        "something did not converge",
    ),
    Variable("gap", "quantum minus classical ground energy", units="energy", derived=True),
    Variable(
        "gap_per_site",
        "quantum minus classical ground energy per site",
        units="energy",
        derived=True,
    ),
    Variable(
        "relative_gap",
        "quantum minus classical ground energy, relative",
        units="1",
        derived=True,
        meaning="gap / |f_min - f_mean|; missing where f_min equals f_mean",
    ),
    Variable("bounds_seconds", "time spent on bounds and product states", units="s"),
    Variable("bounds_message", "remark of the bounds", dtype="text"),
    Variable("seconds", "time spent on the point, classical part not included", units="s"),
)

_GROUPED = (
    Variable(
        "classical_configuration",
        "unit vectors of the classical minimum",
        per="cluster",
        units="1",
        dims=("site", "component"),
        group="configuration",
    ),
    Variable(
        "selected_configuration",
        "unit vectors of the classical minimum that the first quantum correction selects",
        per="rule",
        units="1",
        dims=("site", "component"),
        group="configuration",
        meaning="the start of the quantum branch; which of several tied minima it is can depend on the rule",
    ),
    Variable(
        "positions",
        "position of the site, in units of the lattice constant",
        per="lattice",
        units="1",
        dims=("site", "component"),
        group="configuration",
    ),
    Variable(
        "pairs",
        "sites of a pair",
        per="lattice",
        units="1",
        dtype="index",
        dims=("pair", "end"),
        group="configuration",
        meaning="-1 is padding; the order within a pair is that of the energy function",
    ),
    Variable(
        "extent",
        "extent of the cluster in unit cells, by direction",
        per="lattice",
        units="1",
        dtype="index",
        dims=("direction",),
        group="configuration",
        meaning="-1 is padding; missing for tables of pairs",
    ),
    Variable(
        "periodic",
        "cluster closed on itself in this direction",
        per="lattice",
        dtype="flag",
        flags=_NO_YES,
        dims=("direction",),
        group="configuration",
    ),
    Variable(
        "entanglement_entropy",
        "entanglement entropy across a cut",
        units="1",
        dims=("cut",),
        group="entanglement",
        meaning="von Neumann entropy, natural logarithm; cut c separates the first c + 1 sites of entanglement_order "
        "from the others",
    ),
    Variable(
        "entanglement_order",
        "sites in the order of the cuts",
        units="1",
        dtype="index",
        dims=("place",),
        group="entanglement",
        meaning="-1 is padding",
    ),
    Variable(
        "quantum_moment",
        "quantum moment <S_i>/S",
        units="1",
        dims=("site", "component"),
        group="moments",
    ),
    Variable(
        "classical_moment",
        "classical moment n_i",
        units="1",
        dims=("site", "component"),
        group="moments",
        meaning="of the classical configuration that the first quantum correction selects",
    ),
    Variable(
        "quantum_correlation",
        "quantum correlation <S_i.S_j>/S^2",
        units="1",
        dims=("site", "other_site"),
        group="correlations",
    ),
    Variable(
        "classical_correlation",
        "classical correlation n_i.n_j",
        units="1",
        dims=("site", "other_site"),
        group="correlations",
    ),
    Variable(
        "quantum_correlation_component",
        "quantum correlation by component <S_i^a S_j^a>/S^2",
        units="1",
        dims=("site", "other_site", "component"),
        group="correlations",
    ),
    Variable(
        "classical_correlation_component",
        "classical correlation by component n_i^a n_j^a",
        units="1",
        dims=("site", "other_site", "component"),
        group="correlations",
    ),
    Variable(
        "correlation_difference",
        "root-mean-square difference of quantum and classical correlations",
        units="1",
        group="correlations",
        meaning="over all pairs i < j",
    ),
    Variable(
        "overlap_per_site",
        "overlap per site with the best coherent product state",
        units="1",
        group="overlap",
        meaning="|<product|ground state>|^(2/N)",
    ),
    Variable(
        "trace_bond_dimension",
        "bond dimension of the stage",
        units="1",
        dtype="count",
        dims=("stage",),
        group="convergence",
    ),
    Variable(
        "trace_energy",
        "energy reached in the stage",
        units="energy",
        dims=("stage",),
        group="convergence",
    ),
    Variable(
        "trace_variance",
        "energy variance of the stage",
        units="energy2",
        dims=("stage",),
        group="convergence",
    ),
    Variable(
        "trace_discarded_weight",
        "discarded weight of the stage, summed over bonds",
        units="1",
        dims=("stage",),
        group="convergence",
    ),
)


VARIABLES: dict[str, Variable] = {
    v.name: v for v in (*(replace(v, per="cluster") for v in _CLUSTER), *_POINT, *_GROUPED)
}
"""Every dataset variable by name. The scaling group is described where it is made (scaling.py)."""

GROUPS = tuple(dict.fromkeys(v.group for v in VARIABLES.values() if v.group))
