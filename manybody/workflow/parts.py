"""A study as tasks for the engine: which parts each point needs, their keys, and the function that runs one.

Keys hold everything that a result depends on and nothing else: the bounds of a point do not depend on max_bond, the
classical branch on neither spin nor rule. Parts with equal keys are one part.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass

from manybody.workflow import estimates
from manybody.workflow.document import Settings
from manybody.workflow.points import Cluster, Point, Study
from manybody.workflow.tasks import Task

QUANTUM = ("exact", "sweeps")  # kinds of the quantum part, told apart because their costs are


@dataclass(frozen=True)
class PointKeys:
    """Keys of a point's parts."""

    classical: str
    harmonic: str
    quantum: str
    bounds: str

    def all(self) -> tuple[str, str, str, str]:
        return self.classical, self.harmonic, self.quantum, self.bounds


@dataclass(frozen=True)
class Payload:
    """What a worker gets of a part: small, since it builds the model itself."""

    part: str
    cluster: Cluster
    settings: Settings
    keys: PointKeys
    spin: float = 0.0
    rule: str = ""


def point_keys(study: Study, point: Point) -> PointKeys:
    classical = study.classical_key(point.cluster)
    return PointKeys(
        classical,
        _digest("harmonic", classical, point.rule),
        study.point_key(point, "quantum"),
        _digest("bounds", classical, point.spin, point.rule, study.settings.memory),
    )


def study_tasks(study: Study) -> list[Task]:
    """Every part of every defined point, once."""
    tasks: dict[str, Task] = {}
    settings = study.settings
    for point in study.points:
        if point.undefined:
            continue
        cluster, keys = point.cluster, point_keys(study, point)
        given = (keys.classical, keys.harmonic)
        if keys.classical not in tasks:
            payload = Payload("classical", cluster, settings, keys)
            cost = estimates.classical(cluster, settings)
            tasks[keys.classical] = Task(keys.classical, "classical", cluster.label(), (), payload, *cost)
        if keys.harmonic not in tasks:
            payload = Payload("harmonic", cluster, settings, keys, rule=point.rule)
            cost = estimates.harmonic(cluster, settings)
            label = f"{cluster.label()}, {point.rule}"
            tasks[keys.harmonic] = Task(keys.harmonic, "harmonic", label, given[:1], payload, *cost)
        if keys.quantum not in tasks:
            payload = Payload("quantum", cluster, settings, keys, point.spin, point.rule)
            kind, *cost = estimates.quantum(point, settings)
            tasks[keys.quantum] = Task(keys.quantum, kind, point.label(), given, payload, *cost)
        if keys.bounds not in tasks:
            payload = Payload("bounds", cluster, settings, keys, point.spin, point.rule)
            cost = estimates.bounds(point, settings)
            tasks[keys.bounds] = Task(keys.bounds, "bounds", point.label(), given, payload, *cost)
    return list(tasks.values())


def run_part(payload: Payload, inputs: dict[str, dict], report, checkpoint) -> dict:
    """Run one part; called on the worker."""
    from manybody import pairing
    from manybody.quantum.result import QuantumSettings

    f = payload.cluster.build().energy
    settings, keys = payload.settings, payload.keys
    if payload.part == "classical":
        return pairing.classical_part(f, pairing.ClassicalSettings(settings.starts, settings.seed))
    classical = inputs[keys.classical]
    if payload.part == "harmonic":
        return pairing.harmonic_part(f, payload.rule, classical)
    quantum = QuantumSettings(
        settings.accuracy, settings.max_bond, settings.memory, settings.observables, settings.seed
    )
    harmonic = inputs[keys.harmonic]
    if payload.part == "bounds":
        return pairing.bounds_part(f, payload.spin, payload.rule, quantum, classical, harmonic)
    return pairing.quantum_part(
        f, payload.spin, payload.rule, quantum, classical, harmonic, progress=report, checkpoint=checkpoint
    )


def _digest(*content) -> str:
    return hashlib.sha256(json.dumps(content, separators=(",", ":")).encode()).hexdigest()
