"""The shipped designs: what each is there to show, and that its coefficients are as designed.

The solver is not asked here; floors on the units say what can be said without it.
"""

import re
import subprocess
import sys
from collections.abc import Mapping, Sequence
from fractions import Fraction
from functools import cache
from math import ceil, floor
from pathlib import Path

import numpy as np
import pytest
from scipy import signal

from scheduler.design import Delivery, Design, find_design, load_design
from scheduler.equations import Tap
from scheduler.graph import Kind
from scheduler.limits import limits_of
from scheduler.technology import models_folder, read_toml, shipped

FOLDER = models_folder() / "designs"
SCRIPT = FOLDER / "coefficients.py"
NAMES = sorted(shipped("designs"))


@cache
def design(name: str) -> Design:
    return load_design(find_design(name))


@cache
def designed() -> Mapping[str, tuple[Fraction, ...]]:
    """What the script beside the designs prints: coefficients by name."""
    run = subprocess.run([sys.executable, SCRIPT], capture_output=True, text=True, check=True)
    blocks = re.findall(r"^(\S+)\n((?: .*\n)+)", run.stdout, re.MULTILINE)
    return {name: numbers(rows) for name, rows in blocks}


def numbers(text: str) -> tuple[Fraction, ...]:
    return tuple(Fraction(number) for number in re.findall(r"-?[0-9.]+", text))


def units(name: str, kind: Kind, parallelism: int) -> int:
    """Units of one kind that a block needs, by counting: ceil(J * operations / N)."""
    asked = design(name)
    cycles = floor(parallelism * asked.requirement.cycles_per_sample)
    kinds = {Kind.ADD, Kind.SUBTRACT} if kind is Kind.ADD else {kind}
    return ceil(Fraction(parallelism * len(asked.algorithm.graph.of_kind(*kinds)), cycles))


# Coefficients


def test_every_design_names_the_script_and_the_script_knows_every_design() -> None:
    assert designed().keys() == set(NAMES)
    for path in [*FOLDER.glob("*.toml"), *FOLDER.glob("*.csv")]:
        assert path.read_text(encoding="utf-8").startswith(
            "# Coefficients: models/designs/coefficients.py\n"
        )


def test_the_script_prints_the_coefficients_that_the_files_hold() -> None:
    assert designed() == {
        "bearing-emission-band": csv_of("bearing-emission-band"),
        "gearbox-vibration-band": list_of("gearbox-vibration-band"),
        "oil-pressure-notch": notch_of("oil-pressure-notch"),
        "tachometer-smoothing": constants_of("tachometer-smoothing"),
    }


def csv_of(name: str) -> tuple[Fraction, ...]:
    """The numbers in the file beside a design."""
    return numbers(re.sub("#.*", "", (FOLDER / f"{name}.csv").read_text(encoding="utf-8")))


def list_of(name: str) -> tuple[Fraction, ...]:
    """The numbers in the rows of coefficients of a design."""
    document = read_toml(FOLDER / f"{name}.toml")
    return tuple(
        Fraction(number) for row in document["algorithm"]["coefficients"] for number in row
    )


def constants_of(name: str) -> tuple[Fraction, ...]:
    """The constants of a design's equations as they stand."""
    equations = design(name).algorithm.equations
    return tuple(term for e in equations for term in e.postfix if isinstance(term, Fraction))


def notch_of(name: str) -> tuple[Fraction, ...]:
    """b0 b1 b2 1 a1 a2, where a2 is taken away first and a1 comes last, negated."""
    (a2, minus_a1), (b0, minus_b1, b2) = (
        [term for term in equation.postfix if isinstance(term, Fraction)]
        for equation in design(name).algorithm.equations
    )
    return b0, -minus_b1, b2, Fraction(1), -minus_a1, a2


@pytest.mark.parametrize("name", NAMES)
def test_twelve_fraction_bits_hold_every_coefficient(name: str) -> None:
    assert all((4096 * number).denominator == 1 for number in designed()[name])


# Rounded filters are still the filters that the script's docstrings promise


def gain(numerator: Sequence[Fraction], denominator: Sequence[Fraction], at: float) -> float:
    """Magnitude of B/A at a frequency as a fraction of the sample rate."""
    b, a = ([float(number) for number in row] for row in (numerator, denominator))
    _, response = signal.freqz(b, a, worN=[2 * np.pi * at])
    return float(abs(response[0]))


def vibration_gain(frequency: float) -> float:
    rows = np.reshape(designed()["gearbox-vibration-band"], (3, 6))
    return float(np.prod([gain(row[:3], row[3:], frequency / 102.4e3) for row in rows]))


def test_the_vibration_band_passes_and_its_surroundings_do_not() -> None:
    for inside in (4.2e3, 6e3, 8e3, 11.5e3):
        assert 0.92 < vibration_gain(inside) < 1.02
    for outside in (0, 1.5e3, 25e3, 40e3):
        assert vibration_gain(outside) < 0.01


def test_the_vibration_band_is_stable_after_rounding() -> None:
    for row in np.reshape(designed()["gearbox-vibration-band"], (3, 6)):
        assert max(abs(np.roots([float(number) for number in row[3:]]))) < 0.98


def test_smoothing_has_the_response_of_its_symmetric_taps() -> None:
    half = designed()["tachometer-smoothing"]
    taps = [float(tap) for tap in (*half, *half[3::-1])]
    assert impulse_response(design("tachometer-smoothing"), 12) == [*taps, 0, 0, 0]
    assert sum(taps) == pytest.approx(1, abs=0.001)


def test_the_notch_takes_its_frequency_out_and_leaves_the_rest() -> None:
    row = designed()["oil-pressure-notch"]
    b, a = row[:3], row[3:]
    assert gain(b, a, 3.2 / 51.2) < 0.01
    assert gain(b, a, 0) == pytest.approx(1, abs=0.01)
    assert gain(b, a, 0.25) == pytest.approx(1, abs=0.01)
    wanted = signal.lfilter([float(v) for v in b], [float(v) for v in a], np.eye(1, 40)[0])
    assert np.allclose(impulse_response(design("oil-pressure-notch"), 40), wanted, atol=1e-12)


def impulse_response(asked: Design, count: int) -> list[float]:
    """The first output's answer to a single 1, computed from the equations term by term."""
    values: dict[str, list[Fraction]] = {asked.algorithm.inputs[0]: []}
    values |= {equation.signal: [] for equation in asked.algorithm.equations}
    act = {
        "add": lambda a, b: a + b,
        "subtract": lambda a, b: a - b,
        "multiply": lambda a, b: a * b,
    }
    for n in range(count):
        values[asked.algorithm.inputs[0]].append(Fraction(n == 0))
        for equation in asked.algorithm.equations:
            stack: list[Fraction] = []
            for term in equation.postfix:
                if isinstance(term, Tap):
                    earlier = n - term.delay
                    stack.append(values[term.signal][earlier] if earlier >= 0 else Fraction(0))
                elif isinstance(term, Fraction):
                    stack.append(term)
                else:
                    right, left = stack.pop(), stack.pop()
                    stack.append(act[term](left, right))
            values[equation.signal].append(stack.pop())
    return [float(value) for value in values[asked.algorithm.outputs[0]]]


# What each design is there to show


def test_there_are_four_designs_and_each_stays_small() -> None:
    assert len(NAMES) == 4
    for name in NAMES:
        assert len(design(name).algorithm.graph.operations) <= 60
        assert design(name).requirement.sample_rate is not None
        assert design(name).technology.title == "Unit time, pipelined multiplier"


def test_the_vibration_band_folds_onto_few_units_sample_by_sample() -> None:
    name = "gearbox-vibration-band"
    assert design(name).requirement.cycles_per_sample == 10
    assert [units(name, kind, 1) for kind in (Kind.MULTIPLY, Kind.ADD)] == [2, 2]
    assert [units(name, Kind.MULTIPLY, j) for j in (2, 3, 4)] == [2, 2, 2]
    assert limits_of(design(name)).forbidden is None


def test_smoothing_saves_a_multiplier_with_blocks_of_two_samples() -> None:
    name = "tachometer-smoothing"
    assert design(name).requirement.cycles_per_sample == Fraction(5, 2)
    assert [units(name, Kind.MULTIPLY, j) for j in (1, 2)] == [3, 2]
    assert [units(name, Kind.ADD, j) for j in (1, 2)] == [4, 4]
    assert limits_of(design(name)).forbidden is None


def test_the_emission_band_has_less_than_a_cycle_for_a_sample() -> None:
    asked = design("bearing-emission-band")
    assert asked.requirement.cycles_per_sample == Fraction(2, 3)
    assert asked.requirement.delivery is Delivery.BLOCK
    assert [bool(block.cycles) for block in limits_of(asked).blocks] == [False, True, True, True]
    assert limits_of(asked).forbidden is None


def test_the_notch_is_impossible_because_of_its_loop() -> None:
    asked = design("oil-pressure-notch")
    assert asked.requirement.cycles_per_sample == Fraction(5, 2)
    assert limits_of(asked).iteration_bound == 3
    reason = limits_of(asked).forbidden or ""
    assert reason.startswith("the loop state -> ")
    assert reason.endswith(" takes 3 cycles per sample, the rate leaves 2.5")


def test_a_design_is_found_by_its_bare_name_from_anywhere(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    for name in NAMES:
        assert load_design(find_design(name)) == design(name)
