"""Finished parts to records for the dataset, and where they come from: versions, hosts, times."""

from __future__ import annotations

import json
import platform
from collections import defaultdict
from importlib import metadata

from manybody.workflow.encoding import unpack
from manybody.workflow.journal import Entry, Journal
from manybody.workflow.parts import QUANTUM, PointKeys, point_keys
from manybody.workflow.points import Point, Study

LIBRARIES = ("numpy", "scipy", "xarray", "h5netcdf", "dask", "distributed", "quimb", "numba")
BLOCK = 500  # points whose results are in memory at once


def study_records(study: Study, journal: Journal) -> list[dict]:
    """One record per point, in the order of the study. Nothing is computed: what is not in the journal is missing.

    Raises JournalError where entries changed on disk.
    """
    entries = journal.entries()
    records: list[dict] = []
    placed: set[tuple[str, int]] = set()
    for start in range(0, len(study.points), BLOCK):
        block = [(point, point_keys(study, point)) for point in study.points[start : start + BLOCK]]
        wanted = {key for point, keys in block if not point.undefined for key in keys.all()}
        wanted = {key for key in wanted if key in entries and entries[key].status == "finished"}
        parts = {key: unpack(data) for key, data in journal.data(wanted).items()}
        for point, keys in block:
            record = point.record()
            place = (point.cluster.lattice, point.cluster.sites)
            if place not in placed:
                placed.add(place)
                record |= _geometry(point)
            records.append(record | _point_record(point, keys, parts, entries))
    return records


def _geometry(point: Point) -> dict:
    model = point.cluster.build()
    record = {"positions": model.positions, "pairs": model.pairs}
    if model.extent:
        record["extent"] = list(model.extent)
    if model.periodic:
        record["periodic"] = [bool(flag) for flag in model.periodic]
    return record


def _point_record(point: Point, keys: PointKeys, parts: dict[str, dict], entries: dict[str, Entry]) -> dict:
    from manybody.pairing import assemble
    from manybody.results.schema import VARIABLES

    if point.undefined:
        return {"status": "undefined", "message": point.undefined}
    classical, harmonic, quantum, bounds = (parts.get(key, {}) for key in keys.all())
    record = assemble(point.spin, classical, harmonic, quantum, bounds)
    for key, name in ((keys.classical, "classical"), (keys.harmonic, "harmonic"), (keys.bounds, "bounds")):
        entry = entries.get(key)
        if entry is not None and entry.status != "finished":
            record[f"{name}_message"] = f"{entry.status}: {entry.message}"
    if not quantum:
        entry = entries.get(keys.quantum)
        record["status"] = entry.status if entry is not None and entry.status != "finished" else "waiting"
        record["message"] = entry.message if entry is not None else ""
    known = VARIABLES.keys()
    return {name: value for name, value in record.items() if name in known and not VARIABLES[name].derived}


def study_attrs(study: Study, journal: Journal) -> dict:
    """Global attributes: what was asked, with which versions it was answered, where and in what time."""
    import manybody

    entries = journal.entries()
    keys = {key for point in study.points if not point.undefined for key in point_keys(study, point).all()}
    seconds: dict[str, float] = defaultdict(float)
    hosts = set()
    for key in keys:
        entry = entries.get(key)
        if entry is not None and entry.status == "finished":
            kind = "quantum" if entry.kind in QUANTUM else entry.kind
            seconds[kind] += entry.seconds
            hosts.add(entry.host)
    versions = {"manybody": manybody.__version__, "python": platform.python_version()}
    for name in LIBRARIES:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    settings = study.settings
    return {
        "title": study.title,
        "workflow": study.text,
        "energy_unit": study.energy_unit,
        "energy_normalization": "energies of the function of unit vectors, without a factor S^2",
        "versions": versions,
        "settings": {**vars(settings), "observables": list(settings.observables)},
        "hosts": len(hosts),
        "seconds_by_part": {kind: round(total, 3) for kind, total in sorted(seconds.items())},
        "notes": "\n".join(study.notes),
        **_terms(study),
    }


def _terms(study: Study) -> dict:
    """What the figures need to know of the terms, looked up on the first and last cluster of each lattice.

    term_keys: keys of the groups of terms that occur; symmetry_axes: about how many axes all vectors can be turned.
    """
    ends: dict[str, list] = {}
    for cluster in study.clusters:
        ends.setdefault(cluster.lattice, [cluster, cluster])[1] = cluster
    energies = [cluster.build().energy for pair in ends.values() for cluster in pair]
    keys = {group.key for energy in energies for group in energy.groups}
    return {
        "term_keys": json.loads(json.dumps(sorted(keys))),
        "symmetry_axes": min(len(energy.symmetry_axes()) for energy in energies),
    }
