"""Why a dose has the volume it has, in one plain sentence with rounded numbers."""

from __future__ import annotations

from controller.evaluation.inverse import InverseFit
from controller.titration.dosing import PlannedDose


def dose_reason(
    number: int, volume_ml: float, planned: PlannedDose, sound: InverseFit | None, *, potential_rises: bool
) -> str:
    """The sentence that goes with a dose.

    Args:
        number: of the dose in this run.
        volume_ml: as it is asked for (the planned one, cut to limits and steps).
        planned: what the policy wanted.
        sound: the model that guides; None: none does.
        potential_rises: whether the potential rises with titrant.
    """
    text = f"dose {number}: {volume_ml:.4f} mL"
    if planned.expected_mv is not None:
        share = volume_ml / planned.volume_ml if planned.volume_ml > 0.0 else 1.0
        text += f", expecting {'+' if potential_rises else '-'}{planned.expected_mv * share:.0f} mV"
    text += f" ({planned.why})"
    if planned.goal:
        return f"{text}; {planned.goal}"
    if sound is not None:
        veq, sd = sound.equivalence_ml, sound.standard_uncertainty_ml
        digits = 3 if sd >= 0.0095 else 4
        text += f"; equivalence predicted at {veq:.{digits}f} +/- {sd:.{digits}f} mL"
    return text
