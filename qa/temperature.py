"""Correction of a relaxation time to the temperature of its reference value: pure functions of numbers.

A vial's relaxation time is taken to change by a constant fraction per kelvin near its reference temperature,
``T(t) = T(ref) * (1 + c * (t - ref))``, with `c` the coefficient that its reference states. The uncertainty follows
the law of propagation (JCGM 100:2008, 5.1.2).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot, sqrt

FROM_COMMAND = "given with the command"
FROM_LOG = "log entry"
FROM_TABLE = "temperatures.csv"
U_MEASURED_K = 0.3  # standard uncertainty of a thermometer reading taken beside the phantom, kelvin (common practice)


@dataclass(frozen=True, slots=True)
class RunTemperature:
    """What is known of a run's temperature: a measured value, or only the site's plausible range."""

    celsius: float | None
    u_celsius: float | None
    source: str
    plausible_c: tuple[float, float] = (18.0, 24.0)

    @classmethod
    def measured(cls, celsius: float, source: str, u_celsius: float = U_MEASURED_K) -> RunTemperature:
        """A temperature that somebody read off."""
        return cls(celsius, u_celsius, source)

    @classmethod
    def unknown(cls, plausible_c: tuple[float, float]) -> RunTemperature:
        """No temperature: only the range that the site holds possible."""
        low, high = plausible_c
        return cls(None, None, f"none: {low:g} to {high:g} °C taken as possible", plausible_c)


@dataclass(frozen=True, slots=True)
class Corrected:
    """A value at the reference temperature; `u_temperature_ms` is the part that the correction adds."""

    value_ms: float
    u_temperature_ms: float
    factor: float  # corrected over measured
    note: str | None


def correct(
    value_ms: float, temperature: RunTemperature, at_c: float, per_k_percent: float, u_per_k_percent: float = 0.0
) -> Corrected:
    """Bring `value_ms` to `at_c` degrees Celsius.

    Without a temperature the value stands uncorrected, and its uncertainty is widened by the root mean square
    distance of the site's plausible range (taken as uniform; JCGM 100:2008, 4.3.7) from the reference temperature.

    Parameters
    ----------
    value_ms : milliseconds, as measured
    temperature : the run's
    at_c : reference temperature, degrees Celsius
    per_k_percent, u_per_k_percent : the vial's coefficient and its standard uncertainty, percent per kelvin

    Returns
    -------
    Corrected
        Value in ms, and the standard uncertainty in ms that the correction adds to it.
    """
    c, u_c = per_k_percent / 100.0, u_per_k_percent / 100.0
    if temperature.celsius is None:
        low, high = temperature.plausible_c
        distance_k = sqrt(((low + high) / 2.0 - at_c) ** 2 + (high - low) ** 2 / 12.0)
        added = value_ms * hypot(c, u_c) * distance_k
        note = None
        if added > 0:
            note = (
                f"no temperature: not corrected to {at_c:g} °C, uncertainty widened by {100 * added / value_ms:.1f} %"
            )
        return Corrected(value_ms, added, 1.0, note)
    off_k = temperature.celsius - at_c
    factor = 1.0 / (1.0 + c * off_k)
    u_k = temperature.u_celsius if temperature.u_celsius is not None else U_MEASURED_K
    relative = hypot(c * u_k, off_k * u_c) * factor
    return Corrected(value_ms * factor, value_ms * factor * relative, factor, None)
