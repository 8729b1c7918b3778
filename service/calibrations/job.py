"""Calibrations as a kind of job: a piece is a surface."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

from service.calibrations.mapping import calibrated_surface, without_fit
from service.calibrations.requests import CalibrationAsked
from service.encoding import encode
from service.jobs.kinds import JobKind

__all__ = ["KIND"]

_CHUNK: Final = 8  # surfaces a step: at tens of milliseconds each, well under a second


@dataclass(frozen=True, slots=True)
class _Fits:
    """A calibration request."""

    asked: CalibrationAsked

    @property
    def count(self) -> int:
        return len(self.asked.surfaces)

    def compute(self, index: int, check: Callable[[], None]) -> bytes:
        return encode(calibrated_surface(self.asked, index, check))

    def failed(self, index: int, reason: str) -> bytes:
        return encode(without_fit(self.asked.surfaces[index], "failed", reason))

    def join(self, pieces: Sequence[bytes]) -> bytes:
        return b'{"surfaces":[' + b",".join(pieces) + b"]}"


def _open(body: bytes) -> _Fits:
    return _Fits(CalibrationAsked.model_validate_json(body))


KIND: Final = JobKind(name="calibrations", open=_open, chunk=_CHUNK, pages=("report",))
