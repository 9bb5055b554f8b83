"""How far a variational energy lies above the truth, from its stages of growing bond dimension."""

import itertools
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Stage:
    """One stage of sweeps at a fixed truncation.

    energy is that of the state kept, constant left out; variance and discarded (the summed relative weight cut in its
    last sweep) belong to it; gain is what the last half sweep still won and ratio that gain over the one before.
    """

    bond_dimension: int
    energy: float
    variance: float
    discarded: float
    gain: float
    ratio: float


SAFETY = 3.0


def energy_error(stages: list[Stage], floor: float) -> float:
    """One-sided 95 % bound on energy - truth of the last stage.

    Both the variance and the discarded weight vanish with the error, in proportion once small. The slope of the energy
    against each, between the last stage and those before, extrapolates it to zero; the larger distance times SAFETY
    counts, and at least `floor` (rounding), and so does the sum of the gains of further half sweeps as a geometric
    series.
    """
    last = stages[-1]
    ratio = min(max(last.ratio, 0.5), 0.95)
    distances = [max(last.gain, 0.0) * ratio / (1 - ratio)]
    for measure in ("variance", "discarded"):
        x1 = getattr(last, measure)
        earlier = next((stage for stage in stages[-2:0:-1] if getattr(stage, measure) > 1.5 * x1 > 0), None)
        if earlier is not None:
            fall = max(earlier.energy - last.energy, 0.0)
            distances.append(fall * x1 / (getattr(earlier, measure) - x1))
        elif measure == "variance":
            # No recent slope (a variance at rounding level, or one that did not fall, whatever the discarded weight
            # did): the steepest of all stages, else the standard deviation, which bounds the distance to some
            # eigenvalue.
            slopes = [
                max(a.energy - b.energy, 0.0) / (a.variance - b.variance)
                for a, b in itertools.pairwise(stages)
                if a.variance > 1.5 * b.variance
            ]
            deviation = float(np.sqrt(x1))
            distances.append(min(max(slopes) * x1, deviation) if slopes else deviation)
    return max(SAFETY * max(distances), floor)
