"""The sample of a plan: what the operator says of it, held against the method, and the titrant it should take."""

from __future__ import annotations

import math
from dataclasses import dataclass

from configs.catalogue import substance
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.titration.plan import Sample

#: characters
LONGEST_SAMPLE_ID = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleChoice:
    """What the operator says of the sample; None: as the method says."""

    sample_id: str | None = None
    volume_ml: float | None = None
    mass_g: float | None = None
    initial_volume_ml: float | None = None


def plan_sample(method: MethodSettings, choice: SampleChoice) -> Sample:
    """Return the sample as taken.

    Raises:
        HalfdropError: no amount, one of the wrong kind, more sample than liquid in the vessel, or an id that is none.
    """
    settings = method.sample
    where = f"sample of method {method.name}"
    by_volume = settings.taken_by == "volume"
    wrong = choice.mass_g if by_volume else choice.volume_ml
    option = "--sample-volume-ml" if by_volume else "--sample-mass-g"
    if wrong is not None:
        raise HalfdropError(
            f"got {'a mass' if by_volume else 'a volume'}, the method takes its sample by {settings.taken_by}",
            where=where,
            remedy=f"Give {option}",
        )
    amount = (choice.volume_ml or settings.volume_ml) if by_volume else (choice.mass_g or settings.mass_g)
    given = choice.volume_ml if by_volume else choice.mass_g
    if given is not None and not (math.isfinite(given) and given > 0):
        raise HalfdropError(f"got {given!r}, allowed: a number above 0", where=where, remedy=f"Correct {option}")
    if amount is None:
        raise HalfdropError("no amount is given", where=where, remedy=f"Give {option}")
    initial_ml = settings.initial_volume_ml if choice.initial_volume_ml is None else choice.initial_volume_ml
    steps = method.preparation.dilutions if method.preparation is not None else ()
    in_vessel_ml = steps[-1].aliquot_ml if steps else amount if by_volume else 0.0
    if given is not None and in_vessel_ml == given > initial_ml > 0 and choice.initial_volume_ml is None:
        raise HalfdropError(
            f"got {given:g} mL of sample, allowed: at most {initial_ml:g} mL, all liquid in the vessel by the method",
            where=where,
            remedy=f"Correct {option}, or say with --initial-volume-ml what sample and water are together",
        )
    if not (math.isfinite(initial_ml) and initial_ml > 0) or initial_ml < in_vessel_ml:
        raise HalfdropError(
            f"initial volume: got {initial_ml!r} mL, allowed: all liquid in the vessel, sample and water together",
            where=where,
            remedy="Correct --initial-volume-ml",
        )
    return Sample(
        sample_id=_sample_id(choice, where) or method.simulated_sample or method.name,
        initial_volume_ml=initial_ml,
        volume_ml=amount if by_volume else None,
        mass_g=None if by_volume else amount,
        volume_standard_uncertainty_ml=settings.volume_standard_uncertainty_ml,
        mass_standard_uncertainty_g=settings.mass_standard_uncertainty_g,
        purity_fraction=settings.purity_fraction,
        purity_standard_uncertainty=settings.purity_standard_uncertainty,
    )


def _sample_id(choice: SampleChoice, where: str) -> str | None:
    """Return the sample's id as given; records, reports and tables must be able to hold it."""
    sample_id = choice.sample_id
    if sample_id is None:
        return None
    if not sample_id.strip() or len(sample_id) > LONGEST_SAMPLE_ID:
        raise HalfdropError(
            f"the sample's id has {len(sample_id)} characters, allowed: 1 to {LONGEST_SAMPLE_ID}, not all blank",
            where=where,
            remedy="Correct --sample-id, or leave it out",
        )
    if any("\ud800" <= character <= "\udfff" for character in sample_id):
        raise HalfdropError(
            "the sample's id holds bytes that are no text (not UTF-8)", where=where, remedy="Type --sample-id again"
        )
    return sample_id


def expected_volume_ml(method: MethodSettings, sample: Sample) -> float | None:
    """Return the titrant expected to the last end point, mL; None where nothing tells it."""
    settings = method.analyte
    if settings.expected_equivalence_volume_ml is not None or settings.substance is None:
        return settings.expected_equivalence_volume_ml
    found = substance(settings.substance)
    titrant = substance(method.titrant.substance)
    if method.back_titration is not None:
        return None  # what is left of the excess is not known beforehand
    per_ml = method.titrant.concentration_mol_l * titrant.equivalents
    if sample.mass_g is not None:
        amount_mmol = 1000.0 * sample.mass_g * sample.purity_fraction / found.molar_mass_g_mol
    elif settings.expected_concentration_mol_l is not None and sample.volume_ml is not None:
        amount_mmol = settings.expected_concentration_mol_l * sample.volume_ml
    else:
        return None
    return amount_mmol * aliquot_share(method) * found.equivalents / per_ml


def aliquot_share(method: MethodSettings) -> float:
    """Return the part of the sample as taken that is in the vessel after the method's dilutions; 1 without any."""
    steps = method.preparation.dilutions if method.preparation is not None else ()
    return math.prod(step.aliquot_ml / step.made_up_to_ml for step in steps)
