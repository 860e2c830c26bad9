"""The pair of runs that makes a CMRR: common-mode gain and differential gain over frequency.

Definitions, with both generators at Vcm or at plus and minus Vdm/2::

    A_cm = Vout / Vcm        A_dm = Vout / Vdm        rho = A_cm / A_dm        CMRR = 1 / |rho|

``rho`` is the common-mode error ratio: the differential error at the generators per volt of common mode.
Small errors add in ``rho``, with their signs and phases; decibels are for reading only.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    import pandas as pd

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]
BoolArray = npt.NDArray[np.bool_]

FLOOR_VOLTS = 1e-10
"""Output voltage per volt of drive below which a common-mode output is round-off.

An ac solve in double precision with high loop gain leaves an error of about this size: it is what remains
between two solves of one circuit in different pivot orders. A smaller |A_cm| says only that CMRR is above the
floor.
"""


def _read_only(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    view = values.view()
    view.flags.writeable = False
    return view


@dataclass(frozen=True, eq=False)
class ModePair:
    """Common-mode and differential gain of one case, or of many, over the same frequencies.

    Parameters
    ----------
    frequency_hz : ndarray of float, shape (F,)
        Frequencies in Hz, positive and strictly ascending.
    common_gain : ndarray of complex, shape (..., F)
        A_cm = Vout / Vcm, in V/V, both generators at Vcm.
    differential_gain : ndarray of complex, shape (..., F)
        A_dm = Vout / Vdm, in V/V, the generators at +Vdm/2 and -Vdm/2.

    Raises
    ------
    ValueError
        Where the shapes do not fit, the frequencies are not positive and ascending, a gain is not finite, or
        a differential gain is zero (CMRR is then not defined).
    """

    frequency_hz: FloatArray
    common_gain: ComplexArray
    differential_gain: ComplexArray

    def __post_init__(self) -> None:
        frequency_hz = np.asarray(self.frequency_hz, dtype=np.float64)
        common = np.asarray(self.common_gain, dtype=np.complex128)
        differential = np.asarray(self.differential_gain, dtype=np.complex128)
        if frequency_hz.ndim != 1 or frequency_hz.size == 0:
            raise ValueError(
                f"frequency_hz must have the shape (F,) with F at least 1, not {frequency_hz.shape}"
            )
        if (
            not np.all(np.isfinite(frequency_hz))
            or frequency_hz[0] <= 0
            or np.any(np.diff(frequency_hz) <= 0)
        ):
            raise ValueError("frequency_hz must be finite, positive and strictly ascending")
        for name, gain in (("common_gain", common), ("differential_gain", differential)):
            if gain.shape[-1:] != frequency_hz.shape:
                raise ValueError(
                    f"{name} must have one value per frequency on its last axis ({frequency_hz.size}), "
                    f"not the shape {gain.shape}"
                )
            if not np.all(np.isfinite(gain)):
                raise ValueError(f"{name} must be finite{_first_place(~np.isfinite(gain), frequency_hz)}")
        if common.shape != differential.shape:
            raise ValueError(
                "common_gain and differential_gain must have one shape, "
                f"not {common.shape} and {differential.shape}"
            )
        if np.any(differential == 0):
            raise ValueError(
                f"differential_gain must not be 0{_first_place(differential == 0, frequency_hz)}: "
                "CMRR is not defined there"
            )
        object.__setattr__(self, "frequency_hz", _read_only(frequency_hz))
        object.__setattr__(self, "common_gain", _read_only(common))
        object.__setattr__(self, "differential_gain", _read_only(differential))

    @property
    def error_ratio(self) -> ComplexArray:
        """A_cm / A_dm, shape (..., F), complex, V/V: not limited by the numerical floor."""
        return self.common_gain / self.differential_gain

    @cached_property
    def differential_gain_db(self) -> FloatArray:
        """20 log10 |A_dm|, shape (..., F), in dB."""
        return _read_only(20.0 * np.log10(np.abs(self.differential_gain)))

    @cached_property
    def _common_magnitude(self) -> FloatArray:
        magnitude: FloatArray = np.abs(self.common_gain)
        return magnitude

    @cached_property
    def cmrr_db(self) -> FloatArray:
        """CMRR = -20 log10 |rho|, shape (..., F), in dB, and no more than ``floor_db``."""
        seen = np.maximum(self._common_magnitude, FLOOR_VOLTS)
        return _read_only(self.differential_gain_db - 20.0 * np.log10(seen))

    @property
    def floor_db(self) -> FloatArray:
        """Highest CMRR that the solve can tell: 20 log10(|A_dm| / FLOOR_VOLTS), shape (..., F), in dB."""
        floor_db: FloatArray = self.differential_gain_db - 20.0 * float(np.log10(FLOOR_VOLTS))
        return floor_db

    @cached_property
    def above_floor(self) -> BoolArray:
        """Where CMRR is only known to be above ``cmrr_db``, shape (..., F), bool."""
        return _read_only(self._common_magnitude <= FLOOR_VOLTS)

    def to_frame(self) -> pd.DataFrame:
        """One row per frequency, of a single case.

        Returns
        -------
        DataFrame
            Columns ``frequency_hz``, ``common_re``, ``common_im``, ``differential_re``, ``differential_im``
            (V/V), ``cmrr_db`` (dB) and ``above_floor`` (bool).

        Raises
        ------
        ValueError
            Where the pair holds more than one case.
        """
        if self.common_gain.ndim != 1:
            raise ValueError(f"to_frame takes a single case, of the shape (F,), not {self.common_gain.shape}")
        import pandas as pd

        return pd.DataFrame(
            {
                "frequency_hz": self.frequency_hz,
                "common_re": self.common_gain.real,
                "common_im": self.common_gain.imag,
                "differential_re": self.differential_gain.real,
                "differential_im": self.differential_gain.imag,
                "cmrr_db": self.cmrr_db,
                "above_floor": self.above_floor,
            }
        )


def _first_place(bad: BoolArray, frequency_hz: FloatArray) -> str:
    """Name the first bad sample: its frequency, and its row where there are several."""
    first = np.argwhere(bad)[0]
    row = f", row {', '.join(map(str, first[:-1]))}" if bad.ndim > 1 else ""
    return f" (at {frequency_hz[first[-1]]:g} Hz{row})"
