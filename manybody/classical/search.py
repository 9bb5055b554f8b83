"""Minimum and proof together: starts are spent only until the minimum is proven."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from manybody.classical.certificate import Certificate, CertificateSettings, Prover
from manybody.classical.minimize import ClassicalResult, MinimizeSettings, minimize
from manybody.model.energy import EnergyFunction


@dataclass(frozen=True)
class GroundState:
    """result: the lowest minimum found. certificate: proof or lower bound, None where none was asked for. message: what
    the user must know about them, empty where all is well.
    """

    result: ClassicalResult
    certificate: Certificate | None
    message: str


def find_ground_state(
    f: EnergyFunction,
    starts: int = 64,
    seed: int = 1,
    extra_starts: np.ndarray | None = None,
    prove: bool = True,
    report: Callable[[dict], None] | None = None,
    certificate_settings: CertificateSettings | None = None,
) -> GroundState:
    """Search the global minimum of f and prove it, or give the best lower bound.

    A few starts and their own multipliers come first; where these prove nothing the relaxation is solved once, its
    roundings are the next starts, and its bound ends the search as soon as a configuration reaches it. extra_starts (r,
    N, 3) are tried first. report is called with {"starts": used so far, "energy": lowest so far} between rounds.
    """
    settings = MinimizeSettings(starts=starts, seed=seed)
    if not prove:
        result = minimize(f, settings, extra_starts, report=report)
        return GroundState(result, None, _message(result, None, settings))
    prover = Prover(f, certificate_settings or CertificateSettings())
    result = minimize(f, settings, extra_starts, proof=prover, report=report)
    prover.improve(result.configuration, relaxation=True)
    certificate = prover.certificate(result.configuration)
    return GroundState(result, certificate, _message(result, certificate, settings))


def _message(result: ClassicalResult, certificate: Certificate | None, settings: MinimizeSettings) -> str:
    messages = []
    if not result.converged:
        messages.append(
            f"the classical minimum is not converged: relative gradient {result.gradient_norm:.1e}, "
            f"wanted {settings.tolerance:.0e}"
        )
    elif result.gradient_norm > settings.tolerance:
        messages.append(
            f"the classical descent ended at a relative gradient of {result.gradient_norm:.1e}, wanted "
            f"{settings.tolerance:.0e}: the energy no longer fell beyond rounding, the softest modes are not settled"
        )
    if not result.proven and 0 < result.starts_used < settings.starts:
        messages.append(f"only {result.starts_used} of {settings.starts} starts were made on this many sites")
    if certificate is not None and not certificate.rigorous:
        messages.append("the classical bound is not rigorous: clusters were minimized by many starts")
    return "; ".join(messages)
