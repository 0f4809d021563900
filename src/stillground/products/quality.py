"""What argues for or against the answer place by place, each with how it is made and what it is not."""

from __future__ import annotations

from stillground.protocols import Field, Result

_PRIOR = "Relative to the prior that the user chose: its lengths, its smoothness, its background."
_NOISE_PART = (
    "Standard deviation of the answer when the noise is drawn anew and the iteration repeated to the same "
    "stop; its square is a local mean over half a correlation length. It is this scatter and not the error: "
    f"ground that the survey cannot see does not scatter. {_PRIOR}"
)
_TOTAL_ERROR = (
    "Root mean square error of synthetic grounds drawn from the prior, taken through the same survey, errors "
    "and stopping rule. It is the error on such grounds and not on this one: where the ground is unlike the "
    f"prior, as at sharp edges, it is larger. {_PRIOR}"
)
_RESOLVED = (
    "Covariance of answer and truth over the variance of the truth, on the synthetic grounds of the total "
    "error: 1 where what is there comes back, 0 where nothing does. It is no length of resolution. "
    f"{_PRIOR}"
)
_SPREAD = (
    "Root mean square change of the answer over the variations of lengths and smoothness that summary.json "
    "names, each at its own stop. It says how far these choices matter and is not the error."
)
_INDEX = (
    "Change of the answer over the change of the background, between two runs with other backgrounds "
    "(Oldenburg and Li 1999, Geophysics 64): 0 where the data decide, 1 where the background does."
)


def qualities(result: Result) -> tuple[tuple[Field, str], ...]:
    """Companions of the ground property with a comment on each, empty where the name says all.

    Coverage, ``mesh_change`` and ``<property>_noise_part`` always; ``<property>_total_error`` and
    ``resolved_fraction`` after a rehearsal; ``length_spread`` and ``investigation_index`` where
    settings were varied.
    """
    seen, rehearsal, sensitivity = result.property, result.rehearsal, result.sensitivity
    name, units, of = seen.name, seen.units, seen.long_name
    noise_part = f"noise part of the error of {of}"
    found = [
        (result.coverage, ""),
        (Field("mesh_change", result.mesh_change, units, f"local change of {of} since the rung before"), ""),
        (Field(f"{name}_noise_part", result.noise_part, units, noise_part), _NOISE_PART),
    ]
    if rehearsal is not None:
        total_error = f"total error of {of}, expected on ground like the prior"
        resolved = f"share of the variation of {of} that comes back"
        found += [
            (Field(f"{name}_total_error", rehearsal.total_error, units, total_error), _TOTAL_ERROR),
            (Field("resolved_fraction", rehearsal.resolved, "1", resolved), _RESOLVED),
        ]
    if sensitivity is not None:
        spread = f"change of {of} with other correlation lengths and another smoothness"
        index = "depth of investigation index"
        found += [
            (Field("length_spread", sensitivity.spread, units, spread), _SPREAD),
            (Field("investigation_index", sensitivity.investigation, "1", index), _INDEX),
        ]
    return tuple(found)
