"""Settings checked before anything is computed."""

from __future__ import annotations

from engine.calibration.records import FELLER, LOSSES, RESIDUALS, WEIGHTS, CalibrationSettings
from engine.errors import InputError
from engine.models.bates import Bates
from engine.models.black import Black
from engine.models.double_heston import DoubleHeston
from engine.models.heston import Heston
from engine.models.merton import Merton
from engine.models.variance_gamma import VarianceGamma
from engine.protocols import Model

__all__ = ["CALIBRATED", "checked_kind"]

CALIBRATED: dict[str, type[Model]] = {
    kind.name: kind for kind in (Black, Heston, Bates, Merton, VarianceGamma, DoubleHeston)
}
_MOST_STARTS = 100
_TOLERANCES = (1e-14, 1e-6)
_STRENGTHS = (0.0, 1e9)


def checked_kind(settings: CalibrationSettings) -> type[Model]:
    """The class of the model to fit. Raises InputError for a name or a number that is none of those allowed."""
    for name, allowed in (
        ("model", tuple(CALIBRATED)),
        ("residuals", RESIDUALS),
        ("weights", WEIGHTS),
        ("feller", FELLER),
        ("loss", LOSSES),
    ):
        if getattr(settings, name) not in allowed:
            raise InputError(name, f"is {getattr(settings, name)!r}", allowed=", ".join(allowed))
    if not 1 <= settings.starts <= _MOST_STARTS:
        raise InputError("starts", f"is {settings.starts!r}", allowed=f"1 to {_MOST_STARTS}")
    if settings.seed < 0:
        raise InputError("seed", f"is {settings.seed!r}", allowed="0 or above")
    if settings.max_evaluations < 1:
        raise InputError("max_evaluations", f"is {settings.max_evaluations!r}", allowed="1 or above")
    if not _TOLERANCES[0] <= settings.tolerance <= _TOLERANCES[1]:
        raise InputError("tolerance", f"is {settings.tolerance!r}", allowed=f"{_TOLERANCES[0]:g} to {_TOLERANCES[1]:g}")
    if settings.prior is not None and not _STRENGTHS[0] <= settings.prior.strength <= _STRENGTHS[1]:
        raise InputError(
            "prior.strength", f"is {settings.prior.strength!r}", allowed=f"{_STRENGTHS[0]:g} to {_STRENGTHS[1]:g}"
        )
    for name in settings.fixed:
        if name in settings.start or name in settings.bounds:
            raise InputError(f"fixed.{name}", "is given bounds or a start as well", allowed="one of the three")
    return CALIBRATED[settings.model]
