"""A checked study as points: pure, small, hashable descriptions of what is to be computed, each with its key.

A cluster is one energy function on one lattice of one size; a point is a cluster with a spin and a rule. Keys are
SHA-256 of whatever determines a result, in one canonical form: comments, the order of blocks, titles, units and names
of parameters leave them alone. Two parameter sets that give the same energy function share their keys, and so their
results.
"""

import functools
import hashlib
import itertools
import json
import math
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np

from manybody.model.energy import EnergyFunction
from manybody.model.lattice import Lattice
from manybody.model.quantization import RULES, undefined_reason
from manybody.model.terms import Term, energy_function
from manybody.workflow import schema
from manybody.workflow.document import Document, Settings
from manybody.workflow.entries import RESERVED
from manybody.workflow.problems import DocumentError, Fault, Problem

RESULTS_VERSION = 3
"""Raised by hand whenever the same point would give other numbers than before: old results then count as missing."""


@dataclass(frozen=True)
class Model:
    """What both branches work on.

    energy: the EnergyFunction; positions (N, 3); pairs (P, 2), every two sites that the terms couple, once, ascending;
    extent and periodic: cells per direction and whether it is closed, () where there is no such thing.
    """

    energy: EnergyFunction
    positions: np.ndarray
    pairs: np.ndarray
    extent: tuple[int, ...] = ()
    periodic: tuple[bool, ...] = ()


@dataclass(frozen=True)
class TermRecipe:
    """An energy function as terms on a lattice; the terms in canonical order, those that are zero left out."""

    lattice: Lattice
    terms: tuple[Term, ...]

    def __post_init__(self):
        terms = sorted((term for term in self.terms if not term.is_zero), key=repr)
        object.__setattr__(self, "terms", tuple(terms))

    @functools.cached_property
    def key(self) -> str:
        lattice = self.lattice
        table = _table_digest(lattice.table) if lattice.table is not None else ""
        terms = [[term.kind, term.where, term.values, term.axis] for term in self.terms]
        return _digest(["terms", lattice.shape, lattice.extent, lattice.periodic, table, terms])

    @property
    def sites(self) -> int:
        return self.lattice.sites

    def undefined(self, spin: float, rule: str) -> str:
        """Why there is no operator, "" where there is one."""
        above = [term for term in self.terms if term.rank > 2 * spin and term.count(self.lattice)]
        if rule != "wick" or not above:
            return ""
        # Terms of two kinds cannot cancel, nor can one alone; of several of a kind the sum has to be built to be sure.
        alone = 1 in Counter(term.kind for term in above).values()
        if not alone and not undefined_reason(self.build().energy, spin, rule):
            return ""
        kinds = " and ".join(dict.fromkeys(term.kind for term in above))
        return f"wick has no operator of rank {above[0].rank}, above 2S, for the term {kinds}"

    @property
    def couplings(self) -> int:
        return sum(term.count(self.lattice) for term in self.terms)

    def build(self) -> Model:
        lattice = self.lattice
        names = dict.fromkeys(term.where for term in self.terms if term.on_pairs)
        found = [np.sort(lattice.pairs(name), axis=1) for name in names]
        pairs = np.unique(np.concatenate(found), axis=0) if found else np.zeros((0, 2), dtype=np.int64)
        extent = lattice.extent if lattice.cell or lattice.shape == "bipartite" else ()
        return Model(energy_function(lattice, self.terms), lattice.positions, pairs, extent, lattice.periodic)


@dataclass(frozen=True)
class FunctionRecipe:
    """A ready energy function, for what no workflow file expresses. Positions default to a circle."""

    energy: EnergyFunction
    positions: tuple[tuple[float, float, float], ...] = ()

    @functools.cached_property
    def key(self) -> str:
        return _digest(["function", self.energy.fingerprint()])

    @property
    def sites(self) -> int:
        return self.energy.sites

    def undefined(self, spin: float, rule: str) -> str:
        return undefined_reason(self.energy, spin, rule) or ""

    @property
    def couplings(self) -> int:
        return sum(group.terms for group in self.energy.groups)

    def build(self) -> Model:
        count = self.sites
        if self.positions:
            positions = np.array(self.positions, dtype=float)
        else:
            positions = Lattice("complete", (count,)).positions
        return Model(self.energy, positions, _coupled(self.energy))


@dataclass(frozen=True, eq=False)
class Cluster:
    """One energy function of a study.

    lattice: its name in the study, "" where there is one; parameters: ((name, value), ...) in the order of the study;
    recipe: everything needed to build it, in any process.
    """

    lattice: str
    sites: int
    parameters: tuple[tuple[str, float], ...]
    recipe: TermRecipe | FunctionRecipe

    @property
    def key(self) -> str:
        """Digest of the energy function alone: name and parameters do not enter."""
        return self.recipe.key

    @property
    def couplings(self) -> int:
        """Number of terms in the energy function, about: for estimates."""
        return self.recipe.couplings

    def build(self) -> Model:
        """The model; kept for the few clusters used last in this process."""
        return _build(_ByKey(self.recipe))

    def label(self) -> str:
        """A few words for people: 'square, 16 sites, d = 0.1'."""
        words = [f"{self.sites} sites", *(f"{name} = {value:g}" for name, value in self.parameters)]
        return ", ".join([self.lattice, *words] if self.lattice else words)

    def _identity(self) -> tuple:
        return self.lattice, self.sites, self.parameters, self.key

    def __eq__(self, other):
        return isinstance(other, Cluster) and self._identity() == other._identity()

    def __hash__(self):
        return hash(self._identity())


@dataclass(frozen=True)
class Point:
    """A cluster with a spin and a rule. `undefined` says why there is no operator, "" where there is one."""

    cluster: Cluster
    spin: float
    rule: str
    undefined: str = ""

    @property
    def log10_dimension(self) -> float:
        """log10 of the dimension (2S + 1)^N of the whole space."""
        return self.cluster.sites * math.log10(2 * self.spin + 1)

    def label(self) -> str:
        spin = f"{self.spin:g}" if self.spin == int(self.spin) else f"{int(2 * self.spin)}/2"
        return f"{self.cluster.label()}, S = {spin}, {self.rule}"

    def record(self) -> dict:
        """What identifies the point in a dataset."""
        return {
            "lattice": self.cluster.lattice,
            "sites": self.cluster.sites,
            "spin": self.spin,
            "rule": self.rule,
            "parameters": dict(self.cluster.parameters),
        }


@dataclass(frozen=True)
class Study:
    """All points of a study, in the order of lattices, sizes, parameters, spins and rules.

    notes: what a user should know before running, such as the combinations that are undefined.
    """

    points: tuple[Point, ...]
    settings: Settings = field(default_factory=Settings)
    title: str = ""
    text: str = ""
    energy_unit: str = "1"
    notes: tuple[str, ...] = ()

    @functools.cached_property
    def clusters(self) -> tuple[Cluster, ...]:
        return tuple(dict.fromkeys(point.cluster for point in self.points))

    def classical_key(self, cluster: Cluster) -> str:
        """Key of what depends on neither spin nor rule."""
        return _digest(["classical", RESULTS_VERSION, cluster.key, self.settings.starts, self.settings.seed])

    def point_key(self, point: Point, part: str = "quantum") -> str:
        """Key of one part of a point, which starts from the classical result: "quantum" or "bounds"."""
        settings = self.settings
        chosen = [settings.accuracy, settings.max_bond, settings.memory, settings.observables, settings.seed]
        return _digest([part, RESULTS_VERSION, self.classical_key(point.cluster), point.spin, point.rule, chosen])


def expand(document: Document) -> Study:
    """The points of a checked document. DocumentError if not one of them is defined."""
    clusters = []
    for name, sizes in document.lattices:
        for lattice in sizes:
            for values in itertools.product(*document.parameters.values()):
                parameters = dict(zip(document.parameters, values, strict=True))
                terms = tuple(entry.at(lattice, parameters) for entry in document.terms)
                recipe = TermRecipe(lattice, terms)
                clusters.append(Cluster(name, lattice.sites, tuple(parameters.items()), recipe))
    study = _study(clusters, document.spins, document.rules, document.settings)
    if all(point.undefined for point in study.points):
        remedy = "choose larger spins or another rule"
        problem = Problem("quantum", "", f"no point is defined: {study.points[0].undefined}", remedy)
        raise DocumentError(document.source, [problem])
    return Study(
        study.points, study.settings, document.title, document.text, document.energy_unit, study.notes
    )  # fmt: skip


def study_from_functions(
    functions: EnergyFunction | Mapping | Iterable[EnergyFunction],
    spins: Iterable[float] = (0.5, 1.0, 1.5, 2.0),
    rules: Iterable[str] = ("substitution",),
    *,
    parameters: Iterable[str] = (),
    positions: Mapping | None = None,
    settings: Settings | None = None,
    title: str = "",
    energy_unit: str = "1",
) -> Study:
    """A study of energy functions made in Python, run and stored like any other.

    functions: one EnergyFunction; several of different size, as a list or a mapping from size; or, with the names of
        `parameters`, a mapping from their values (a number, or a tuple) to one EnergyFunction or a list of them.
    positions: number of sites -> (N, 3), where the default, a circle, will not do.
    Raises ValueError for no function, two of one size at the same parameters, values that do not fit the names, and a
    study without one defined point.
    """
    names = tuple(parameters)
    for name in names:
        if reason := schema.parameter_name_fault(name, RESERVED):
            raise ValueError(f"'{name}' {reason}")
    if not names:
        listed = {(): list(functions.values()) if isinstance(functions, Mapping) else functions}
    elif isinstance(functions, Mapping):
        listed = {
            tuple(np.atleast_1d(np.asarray(key, dtype=float)).tolist()): value for key, value in functions.items()
        }
    else:
        raise ValueError(f"with the parameters {list(names)}, give a mapping from their values to energy functions")
    clusters = []
    for values, entry in listed.items():
        if len(values) != len(names):
            raise ValueError(f"{len(values)} values {list(values)} for the {len(names)} parameters {list(names)}")
        sizes = set()
        for energy in [entry] if isinstance(entry, EnergyFunction) else entry:
            if energy.sites in sizes:
                raise ValueError(f"two energy functions of {energy.sites} sites at the same parameters {list(values)}")
            sizes.add(energy.sites)
            where = np.asarray((positions or {}).get(energy.sites, np.zeros((0, 3))), dtype=float)
            if where.shape not in {(0, 3), (energy.sites, 3)}:
                raise ValueError(f"positions of {energy.sites} sites have the shape {where.shape}")
            recipe = FunctionRecipe(energy, tuple(map(tuple, where.tolist())))
            clusters.append(Cluster("", energy.sites, tuple(zip(names, values, strict=True)), recipe))
    spins = _distinct(spins, schema.spin_number, "spin")
    rules = _distinct(rules, schema.choice(RULES, "rule"), "rule")
    if not clusters:
        raise ValueError("a study needs at least one energy function")
    study = _study(clusters, spins, rules, settings or Settings())
    if all(point.undefined for point in study.points):
        raise ValueError(f"no point is defined: {study.points[0].undefined}")
    return Study(study.points, study.settings, title, "", energy_unit, study.notes)


def _distinct(values, read, what: str) -> tuple:
    values = [values] if isinstance(values, str | int | float) else list(values)
    try:
        result = tuple(dict.fromkeys(read(value) for value in values))
    except Fault as fault:
        raise ValueError(f"{what}: {values} {fault.wrong}; {fault.remedy}") from None
    if not result or len(result) != len(values):
        raise ValueError(f"give each {what} once, and at least one, not {values}")
    return result


def _study(clusters: list[Cluster], spins: tuple, rules: tuple, settings: Settings) -> Study:
    points, reasons = [], {}
    for cluster in clusters:
        for spin, rule in itertools.product(spins, rules):
            undefined = cluster.recipe.undefined(spin, rule)
            if undefined:
                reasons.setdefault((spin, rule, undefined), []).append(cluster)
            points.append(Point(cluster, spin, rule, undefined))
    notes = [
        f"undefined at S = {spin:g} under {rule}, {len(found)} of {len(clusters)} clusters: {reason}"
        for (spin, rule, reason), found in reasons.items()
    ]
    return Study(tuple(points), settings, notes=tuple(notes))


class _ByKey:
    """A recipe that compares by key, for the cache below: hashing a large table again and again would cost more."""

    def __init__(self, recipe: TermRecipe | FunctionRecipe):
        self.recipe = recipe

    def __eq__(self, other):
        return self.recipe.key == other.recipe.key and type(self.recipe) is type(other.recipe)

    def __hash__(self):
        return hash(self.recipe.key)


@functools.lru_cache(maxsize=8)
def _build(by_key: _ByKey) -> Model:
    return by_key.recipe.build()


@functools.lru_cache(maxsize=64)
def _table_digest(table) -> str:
    """Rows in any order, labels and exchange included; positions are not part of the energy."""
    labels = table.labels or ("",) * len(table.pairs)
    exchange = table.exchange or ((),) * len(table.pairs)
    return _digest([table.sites, sorted(zip(table.pairs, labels, exchange, strict=True))])


def _coupled(energy: EnergyFunction) -> np.ndarray:
    """Every two sites that stand in one term of two or more sites."""
    found = [np.zeros((0, 2), dtype=np.int64)]
    for group in energy.groups:
        for a, b in itertools.combinations(range(group.sites.shape[1]), 2):
            found.append(np.sort(group.sites[:, [a, b]], axis=1))
    return np.unique(np.concatenate(found), axis=0)


def _digest(content) -> str:
    # repr of a float is the shortest text that gives the same float back: one text for one number.
    return hashlib.sha256(json.dumps(content, separators=(",", ":")).encode()).hexdigest()
