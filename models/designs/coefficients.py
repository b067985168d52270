"""Designs the filters of the designs in this folder with scipy.signal and prints their numbers.

    python models/designs/coefficients.py

Each design follows as its name on a line of its own and its coefficients in the order in which the
design's file holds them. All are multiples of 2^-12, so 12 fraction bits hold them exactly. The
filters belong to a unit that watches over an industrial gearbox; frequencies are in Hz.
"""

from __future__ import annotations

import sys

import numpy as np
from scipy import signal

FRACTION_BITS = 12


def vibration_band() -> np.ndarray:
    """Gear mesh and its sidebands, 4 to 12 kHz: three elliptic biquads, 0.5 dB and 40 dB."""
    rate = 102.4e3
    sections = signal.ellip(3, 0.5, 40, (4e3, 12e3), "bandpass", output="sos", fs=rate)
    return scaled(sections)


def scaled(sections: np.ndarray) -> np.ndarray:
    """Biquads of shape (k, 6), with no gain above 1 from the input to the end of any section."""
    made, response = sections.copy(), np.ones(2**14, dtype=complex)
    for section in made:
        _, own = signal.freqz(section[:3], section[3:], worN=response.size)
        peak = np.max(np.abs(response * own))
        section[:3] /= peak
        response *= own / peak
    return made


def tachometer_smoothing() -> np.ndarray:
    """Below 60 kHz of 409.6 kHz: nine taps with linear phase, so five numbers suffice."""
    return signal.firwin(9, 60e3, fs=409.6e3)[:5]


def bearing_emission() -> np.ndarray:
    """Acoustic emission around 200 kHz of 1.536 MHz: eight taps, 120 to 280 kHz."""
    return signal.firwin(8, (120e3, 280e3), pass_zero=False, fs=1.536e6)


def oil_pressure_notch() -> np.ndarray:
    """The oil pump's ripple at 3.2 kHz taken out of 51.2 kHz: one biquad of quality 8."""
    numerator, denominator = signal.iirnotch(3.2e3, 8, fs=51.2e3)
    return np.concatenate((numerator, denominator))


FILTERS = {
    "gearbox-vibration-band": vibration_band,
    "tachometer-smoothing": tachometer_smoothing,
    "bearing-emission-band": bearing_emission,
    "oil-pressure-notch": oil_pressure_notch,
}


def rounded(value: float) -> str:
    """The nearest multiple of 2^-12 as an exact decimal."""
    nearest = round(value * 2**FRACTION_BITS) / 2**FRACTION_BITS
    return f"{nearest:.{FRACTION_BITS}f}".rstrip("0").rstrip(".")


def main() -> None:
    """Prints every design's coefficients."""
    for name, design in FILTERS.items():
        sys.stdout.write(f"{name}\n")
        for row in np.atleast_2d(design()):
            sys.stdout.write(f"    {', '.join(rounded(value) for value in row)}\n")


if __name__ == "__main__":
    main()
