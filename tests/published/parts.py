"""Parts of the textbook stages that the checks perturb."""

from collections.abc import Mapping

IDEAL = {"open_loop_gain": 1e9, "gain_bandwidth": 1e12}
"""An op-amp near enough to ideal: its loop errors are below 1e-6 at gains up to 1000 and below 1 kHz."""

TYPICAL = {"open_loop_gain": 1e6, "gain_bandwidth": 1e6}


def opamps(names: str, parameters: Mapping[str, float]) -> dict[str, float]:
    """The same op-amp in every place of `names`, such as "A1 A2"."""
    return {f"{name}.{key}": value for name in names.split() for key, value in parameters.items()}


def difference(gain: float = 10.0, parameters: Mapping[str, float] = IDEAL) -> dict[str, float]:
    return {"R1": 1e4, "R2": gain * 1e4, "R3": 1e4, "R4": gain * 1e4} | opamps("A1", parameters)


def buffered_difference(gain: float = 10.0, parameters: Mapping[str, float] = IDEAL) -> dict[str, float]:
    return difference(gain) | opamps("A1 A2 A3", parameters)


def three_opamp(
    first_gain: float = 101.0, gain: float = 1.0, parameters: Mapping[str, float] = IDEAL
) -> dict[str, float]:
    feedback = {"RF1": 1e4, "RF2": 1e4}
    if first_gain != 1:
        feedback["RG"] = 2e4 / (first_gain - 1)
    return difference(gain) | feedback | opamps("A1 A2 A3", parameters)


def two_opamp(
    ratio: float = 10.0, rg: float | None = None, parameters: Mapping[str, float] = IDEAL
) -> dict[str, float]:
    """R1 = R4 = `ratio` times R2 = R3."""
    parts = {"R1": ratio * 1e4, "R2": 1e4, "R3": 1e4, "R4": ratio * 1e4}
    return parts | ({} if rg is None else {"RG": rg}) | opamps("A1 A2", parameters)
