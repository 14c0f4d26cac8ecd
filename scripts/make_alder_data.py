"""Make the measured-style data of the Alder bench: a step response, a transmission, a spectrum.

The bench is invented; so are these data. Shapes and sizes are those of common parts: a filter of
some hundred MHz, a few percent of slow settling, a mismatched cable, 1/f noise. Run it to make the
files again, byte for byte:

    python scripts/make_alder_data.py [FOLDER]
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

SEED = 4711
STEP_NOISE = 2e-4  # of a step averaged many times
SAMPLE_NS = 0.25


def step_response(rng: np.random.Generator) -> str:
    """Filter of 250 MHz, 4 % that settles within 12 ns, one echo of 1.5 % after 6 ns."""
    time = np.arange(-8, 400) * SAMPLE_NS
    after = np.maximum(time, 0)
    fast = -np.expm1(-after / (1e3 / (2 * np.pi * 250)))
    slow = -0.04 * np.exp(-after / 12) * fast
    echo = 0.015 * -np.expm1(-np.maximum(time - 6, 0) / 1.2)
    value = 0.4 * (fast + slow + echo) + 0.4 * STEP_NOISE * rng.normal(size=len(time))
    value[time < 0] = 0.4 * STEP_NOISE * rng.normal(size=np.sum(time < 0))
    lines = ["# Alder bench, drive line 1: step response, volts into 50 ohm, 1000 averages"]
    lines.append("time_ns,response")
    lines += [f"{t:.2f},{v:.6f}" for t, v in zip(time, value, strict=True)]
    return "\n".join(lines) + "\n"


def transmission() -> str:
    """A line of 2 m with a resonant dip near 5.4 GHz and a mismatch at both ends, 4 to 6 GHz."""
    frequency = np.linspace(4.0, 6.0, 401)  # GHz
    delay, loss_db = 9.3, 3.2 * np.sqrt(frequency / 5)  # ns
    through = 10 ** (-loss_db / 20) * np.exp(-2j * np.pi * frequency * delay)
    mismatch = 0.12
    echo = mismatch**2 * 10 ** (-2 * loss_db / 20) * np.exp(-4j * np.pi * frequency * delay)
    dip = 1 - 0.35 / (1 + 2j * (frequency - 5.4) / 0.16)
    s21 = through * (1 - mismatch**2) * dip / (1 - echo)
    s11 = mismatch * (1 - 10 ** (-2 * loss_db / 20) * np.exp(-4j * np.pi * frequency * delay))
    rows = ["! Alder bench, drive line 1, mixer to cold plate", "# GHz S RI R 50"]
    for f, a, b in zip(frequency, s11, s21, strict=True):
        rows.append(
            f"{f:.4f} {a.real:.6f} {a.imag:.6f} {b.real:.6f} {b.imag:.6f} "
            f"{b.real:.6f} {b.imag:.6f} {a.real:.6f} {a.imag:.6f}"
        )
    return "\n".join(rows) + "\n"


def noise_spectrum() -> str:
    """1/f of 1 kHz^2 at 1 Hz down to a white floor, in Hz^2/Hz of the qubit's frequency."""
    frequency = np.geomspace(1e3, 1e9, 61)
    density = 1e6 / frequency + 2e1
    rows = ["# Alder bench, alder-1: one-sided density of the qubit frequency"]
    rows.append("frequency_Hz,density_Hz2_per_Hz")
    rows += [f"{f:.6g},{s:.6g}" for f, s in zip(frequency, density, strict=True)]
    return "\n".join(rows) + "\n"


def main() -> None:
    """Write the three files."""
    here = Path(__file__).resolve().parent.parent / "configs" / "alder_data"
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else here
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "step_response.csv").write_text(step_response(np.random.default_rng(SEED)))
    (folder / "transmission.s2p").write_text(transmission())
    (folder / "noise_spectrum.csv").write_text(noise_spectrum())


if __name__ == "__main__":
    main()
