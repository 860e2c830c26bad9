"""Random stages with everything in them: what two solvers are compared on."""

import numpy as np

TOPOLOGIES = ("difference", "buffered-difference", "two-opamp", "three-opamp")

OPAMPS = {
    "difference": ("A1",),
    "buffered-difference": ("A1", "A2", "A3"),
    "two-opamp": ("A1", "A2"),
    "three-opamp": ("A1", "A2", "A3"),
}

MISMATCH = 3e-3
"""Standard deviation of each resistor and capacitor about its nominal value, where a stage is not matched."""


def random_parts(topology: str, rng: np.random.Generator) -> dict[str, float]:
    """Parts of one random stage behind a random unbalanced source.

    Parameters
    ----------
    topology : str
    rng : numpy.random.Generator

    Returns
    -------
    dict
        Part name to SI value. Half of the stages have resistors off by parts per thousand, half are matched
        far better, so that CMRR reaches 140 dB too. Each op-amp is a different one: gains of 80 to 140 dB,
        gain-bandwidths of 100 kHz to 50 MHz, CMRR of either sign with and without a corner, phase margins,
        input and output impedances; the source has cable, filter and bias. Every optional part is sometimes
        absent.
    """

    def spread(low: float, high: float) -> float:
        return float(np.exp(rng.uniform(np.log(low), np.log(high))))

    care = 1.0 if rng.random() < 0.5 else spread(1e-4, 1)

    def off(nominal: float) -> float:
        return nominal * (1 + care * MISMATCH * float(rng.standard_normal()))

    parts: dict[str, float] = {}

    def pair(first: str, second: str, nominal: float, chance: float = 1.0) -> None:
        if rng.random() < chance:
            parts[first], parts[second] = off(nominal), off(nominal)

    base, gain = spread(1e3, 1e5), spread(1, 100)
    if topology == "two-opamp":
        pair("R1", "R4", base)
        pair("R2", "R3", base / spread(1, 20))
        if rng.random() < 0.7:
            parts["RG"] = off(2 * parts["R4"] / gain)
    else:
        pair("R1", "R3", base)
        pair("R2", "R4", base * (gain if topology != "three-opamp" else spread(0.5, 10)))
    if topology == "three-opamp":
        feedback = spread(1e3, 5e4)
        pair("RF1", "RF2", feedback)
        pair("CF1", "CF2", spread(1e-12, 1e-10), 0.5)
        if rng.random() < 0.8:
            parts["RG"] = off(2 * feedback / gain)
    pair("C2", "C4", spread(1e-12, 1e-10), 0.5)
    if rng.random() < 0.5:
        parts["RREF"] = care * spread(0.1, 10)
    if rng.random() < 0.7:
        parts["RL"] = spread(1e3, 1e5)

    for name in OPAMPS[topology]:
        parts[f"{name}.open_loop_gain"] = spread(1e4, 1e7)
        parts[f"{name}.gain_bandwidth"] = spread(1e5, 5e7)
        if rng.random() < 0.7:
            parts[f"{name}.phase_margin"] = rng.uniform(40, 85)
        if rng.random() < 0.8:
            parts[f"{name}.cmrr"] = spread(1e3, 1e7) / care
            parts[f"{name}.cmrr_sign"] = float(rng.choice((-1, 1)))
            if rng.random() < 0.7:
                parts[f"{name}.cmrr_corner"] = spread(10, 1e5)
        for parameter, low, high in (
            ("input_resistance_differential", 3e4, 1e12),
            ("input_capacitance_differential", 1e-13, 2e-11),
            ("input_resistance_common", 1e8 / care, 1e13),
            ("input_capacitance_common", 1e-13, 1e-11),
            ("output_resistance", 1, 300),
        ):
            if rng.random() < 0.8:
                parts[f"{name}.{parameter}"] = spread(low, high)

    pair("RSP", "RSN", spread(10, 1e4), 0.8)
    if rng.random() < 0.8:
        parts["RI"] = max(0.1, care * spread(1, 1e4)) * float(rng.choice((-1, 1)))
        if rng.random() < 0.5:
            parts["CI"] = spread(1e-10, 1e-7)
    pair("CCP", "CCN", spread(1e-11, 5e-9), 0.8)
    if rng.random() < 0.6:
        parts["CCB"] = spread(1e-11, 5e-9)
    if rng.random() < 0.6:
        pair("RFP", "RFN", spread(10, 5e3))
        pair("CFP", "CFN", spread(1e-11, 1e-9))
        parts["CFB"] = 10 * parts["CFP"]
    pair("RBP", "RBN", spread(1e5, 1e8), 0.7)
    return {name: float(value) for name, value in parts.items()}
