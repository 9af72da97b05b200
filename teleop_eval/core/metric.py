# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One measured quantity with all that a reader needs to judge it."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

OK = 'ok'
UNOBSERVABLE = 'unobservable'
INSUFFICIENT = 'insufficient'
NOT_CONFIGURED = 'not_configured'


@dataclass(frozen=True)
class Metric:
    """
    Value of one quantity, or the reason why there is none.

    Attributes
    ----------
    value
        The number in `unit`, None unless `status` is 'ok'.
    unit
        Unit as text: 'm', 'rad', 's', 'arm lengths', '1' for a pure number.
    ci95
        95 % interval (low, high) from independent blocks, None where there are too few.
    n
        Number of independent blocks behind the value.
    samples
        Number of grid or stream samples behind the value.
    status
        'ok', 'unobservable', 'insufficient' or 'not_configured'.
    reason
        One sentence when the status is not 'ok'; a caveat or '' otherwise.
    details
        Named further numbers (standard error, correlation peak, scale uncertainty, ...).

    """

    value: float | None
    unit: str
    ci95: tuple[float, float] | None = None
    n: int = 0
    samples: int = 0
    status: str = OK
    reason: str = ''
    details: dict[str, object] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Refuse a number that is none and a missing number called ok."""
        if (self.status == OK) != (self.value is not None):
            raise ValueError(f'status {self.status!r} does not fit value {self.value!r}')
        if self.value is not None and not math.isfinite(self.value):
            raise ValueError(f'a metric value must be finite, got {self.value!r}')

    @property
    def number(self) -> float:
        """Return the value, NaN where there is none."""
        return math.nan if self.value is None else self.value

    def to_dict(self) -> dict[str, object]:
        """Return the metric as plain types, in the order a reader wants."""
        document: dict[str, object] = {
            'value': self.value,
            'unit': self.unit,
            'ci95': list(self.ci95) if self.ci95 is not None else None,
            'n': self.n,
            'samples': self.samples,
            'status': self.status,
            'reason': self.reason,
        }
        if self.details:
            document['details'] = self.details
        return document


def missing(status: str, unit: str, reason: str, **details: object) -> Metric:
    """Return a metric without a value, with the reason as one sentence."""
    return Metric(None, unit, status=status, reason=reason, details=dict(details))


def joined(*caveats: str) -> str:
    """Return the caveats that there are as one reason."""
    return '; '.join(caveat for caveat in caveats if caveat)
