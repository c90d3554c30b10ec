"""What a proton that has not relaxed loses of its signal, and the way back.

Pulses of angle θ every TR seconds leave (1 − E)/(1 − E cos θ) of the full signal in the steady
state, E = exp(−TR/T1) (derived; 99.33 % at TR = 5 T1 and 90°).
"""

from math import cos, exp, radians

import numpy as np

from kinetics.remarks import Remark
from kinetics.signals.model import FollowPlan, Integrals
from kinetics.spectra.model import Float64

# Where files record no pulse angle. The usual one for amounts (common practice), and the one at
# which most is lost.
_USUAL_ANGLE_DEG = 90.0
# A factor that differs by less between a signal and the reference is not worth a word.
_WORTH = 0.01


def saturation_factor(recycle_s: float, t1_s: float, flip_angle_deg: float = 90.0) -> float:
    """Return the part of the full signal that is left, 0 … 1.

    Examples
    --------
    >>> round(saturation_factor(5.0, 1.0), 4)
    0.9933
    """
    rest = exp(-recycle_s / t1_s)
    return (1.0 - rest) / (1.0 - rest * cos(radians(flip_angle_deg)))


def relaxed(
    integrals: Integrals, plan: FollowPlan, recycle_s: float | None, flip_angle_deg: float | None
) -> tuple[Integrals, tuple[Remark, ...]]:
    """Undo saturation where it can be undone, and say how much it was.

    Corrected are the integrals of a spectrum whose recycle time is recorded, if T1 of the reference
    (where there is one) and of every signal is known: half a correction would only shift the error.
    """
    known = [signal.t1_s for signal in plan.all]
    if not any(known):
        return integrals, ()
    if recycle_s is None or not recycle_s > 0:
        return integrals, (
            Remark(
                "recycle-unknown",
                "The sheet gives T1, but this file records no recycle time.",
                "Saturation was not corrected: amounts may be too small or too large.",
                "Wait five T1 between scans; then nothing needs correcting.",
            ),
        )
    angle = _USUAL_ANGLE_DEG if flip_angle_deg is None else flip_angle_deg
    factors = np.array(
        [1.0 if t is None else saturation_factor(recycle_s, t, angle) for t in known]
    )
    complete = all(known)
    remarks = _remarks(plan, factors, recycle_s, angle, flip_angle_deg is None, complete)
    if not complete:
        return integrals, remarks
    return _divided(integrals, factors), remarks


def _divided(integrals: Integrals, factors: Float64) -> Integrals:
    return Integrals(
        integrals.values / factors,
        integrals.covariance / np.outer(factors, factors),
        integrals.offsets_ppm,
        integrals.heights,
    )


def _remarks(
    plan: FollowPlan,
    factors: Float64,
    recycle_s: float,
    angle: float,
    assumed: bool,
    corrected: bool,
) -> tuple[Remark, ...]:
    base = float(factors[0]) if plan.reference is not None else 1.0
    off = factors / base - 1.0
    if np.abs(off).max() < _WORTH:
        return ()
    worst = int(np.argmax(np.abs(off)))
    parts = ", ".join(
        f"{signal.species} {100 * factor:.1f} %"
        for signal, factor in zip(plan.all, factors, strict=True)
        if signal.t1_s is not None
    )
    way = "assumed, not recorded" if assumed else "recorded"
    return (
        Remark(
            "recycling-short",
            f"Scans follow each other every {recycle_s:.3g} s at {angle:.0f}° ({way}): {parts} of "
            "the full signal are left.",
            (
                "The integrals were corrected for it; an error of T1 stays in them."
                if corrected
                else "Nothing was corrected, since T1 is not given for all signals; the amount of "
                f"{plan.all[worst].species} is off by {100 * off[worst]:.0f} %. A first-order k "
                "is not."
            ),
            f"Wait five times the longest T1: {5 * max(s.t1_s or 0.0 for s in plan.all):.3g} s.",
            subject=plan.all[worst].species,
        ),
    )
