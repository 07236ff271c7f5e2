"""The example scenario: invented from end to end, made by formula and seeded noise.

An invented maker of extruded netting buys two linear polyethylene grades, called here Fell and
Tarn (invented, like everything in this file). The melts "in nature" follow a kernel and an exponent
that are not the tool's defaults, and a time law 6 % off the card's, so that the example shows the
tool at work on a world it does not know. What the laboratory gets: GPC slices with noise, baseline
and an exclusion limit, sweeps at three temperatures with noise, three weighed blends, a lot with a
tail that the GPC does not see, and a data sheet with one wrong number.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.relaxation.flow import melt_flow_rate
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import log_grid

# the invented world's own law: not the tool's default kernel, exponent or time law
TRUE_MODEL = Model(kernel="reptation", exponent=2.1, rouse=True)
TRUE_TIME_FACTOR = 1.06
NOISE = 0.02
EXCLUSION = 1.2e6
TEMPERATURES = (160.0, 190.0, 220.0)
BLENDS = (0.25, 0.50, 0.75)
MARK = "invented data, made by a script for the example; no real company, grade or lot"


@dataclass(frozen=True)
class Grade:
    """An invented grade: its chains in the invented world."""

    name: str
    chains: Distribution


def grades() -> dict[str, Grade]:
    """Fell (stiffer, shorter), Tarn (longer, broader) and a lot of Fell with a tail."""
    fell = families.lognormal(1.15e5, 4.5)
    tarn = families.mixture_of_lognormals([1.6e5, 4.0e5], [3.5, 2.5], [0.7, 0.3])
    tailed = families.mixture_of_lognormals([1.15e5, 2.4e6], [4.5, 1.3], [0.985, 0.015])
    return {
        "fell": Grade("Fell", fell),
        "tarn": Grade("Tarn", tarn),
        "lot": Grade("Fell lot 4417", tailed),
    }


def true_melt(polymer: Polymer, temperature_C: float) -> Melt:
    """The card's melt with the invented world's time law."""
    return polymer.melt(temperature_C).with_(time_factor=TRUE_TIME_FACTOR)


def write_scenario(folder: Path, seed: int = 20) -> list[Path]:
    """Write all input files of the example.

    Parameters
    ----------
    folder : Path
        Made if it does not exist; files of the same names are replaced.
    seed : int
        Of the noise.

    Returns
    -------
    list of Path
    """
    folder.mkdir(parents=True, exist_ok=True)
    polymer = builtin("hdpe")
    made: list[Path] = []

    def write(name: str, text: str) -> None:
        path = folder / name
        path.write_text(text, encoding="utf-8", newline="\n")
        made.append(path)

    # a child generator for each file: adding one file does not change the others
    streams = iter(np.random.SeedSequence(seed).spawn(64))

    def rng() -> np.random.Generator:
        return np.random.default_rng(next(streams))

    every = grades()
    for key, grade in every.items():
        write(f"{key}-gpc.csv", gpc_text(grade, rng()))
    for key in ("fell", "tarn"):
        write(f"{key}-sweeps.csv", sweeps_text(every[key], polymer, TEMPERATURES, rng()))
    for key in ("fell", "tarn", "lot"):
        write(f"{key}-190.csv", sweep_text(every[key].name, every[key].chains, polymer, rng()))
    for share in BLENDS:
        chains = Distribution.blend(
            [(every["fell"].chains, share), (every["tarn"].chains, 1 - share)], points=120
        )
        percent = round(100 * share)
        write(
            f"blend-{percent}.csv",
            sweep_text(f"Fell {percent} / Tarn {100 - percent}", chains, polymer, rng()),
        )
    write("blends.toml", study_text())
    write("fell-sheet.toml", sheet_text(every["fell"], polymer))
    write("READ-ME.txt", _read_me())
    return made


def gpc_text(grade: Grade, rng: np.random.Generator) -> str:
    """GPC slices as an export would have them: falling M, noise, baseline, exclusion limit."""
    m = np.geomspace(1.5e3, EXCLUSION, 90)[::-1]
    density = np.interp(
        np.log(m), np.log(grade.chains.molar_mass), grade.chains.density, left=0.0, right=0.0
    )
    signal = density * (1 + 0.01 * rng.standard_normal(m.size))
    signal = signal + 0.002 * density.max() * rng.standard_normal(m.size)
    rows = [f"# {MARK}", f"# sample: {grade.name}", "# absolute calibration"]
    rows.append("M [g/mol],dW/dlog10M")
    rows += [f"{a:.5g},{b:.5f}" for a, b in zip(m, signal, strict=True)]
    return "\n".join(rows) + "\n"


def _noisy(
    chains: Distribution, melt: Melt, omega: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    storage, loss = Relaxation(chains, melt, TRUE_MODEL).moduli(omega)
    a = storage * np.exp(NOISE * rng.standard_normal(omega.size))
    b = loss * np.exp(NOISE * rng.standard_normal(omega.size))
    return a, b


def sweep_text(name: str, chains: Distribution, polymer: Polymer, rng: np.random.Generator) -> str:
    """One sweep at 190 C in rad/s and Pa."""
    omega = log_grid(0.01, 500.0, 6)
    a, b = _noisy(chains, true_melt(polymer, 190.0), omega, rng)
    rows = [f"# {MARK}", f"# sample: {name}", "omega [rad/s],G' [Pa],G'' [Pa],T [C]"]
    rows += [f"{w:.5g},{x:.5g},{y:.5g},190" for w, x, y in zip(omega, a, b, strict=True)]
    return "\n".join(rows) + "\n"


def sweeps_text(
    grade: Grade, polymer: Polymer, temperatures: tuple[float, ...], rng: np.random.Generator
) -> str:
    """Sweeps at several temperatures in one file: Hz, kPa, semicolons, a row of units."""
    frequency = log_grid(0.005, 80.0, 6)
    rows = [f"# {MARK}", f"# sample: {grade.name}", "T;f;G';G''", "C;Hz;kPa;kPa"]
    for temperature in temperatures:
        melt = true_melt(polymer, temperature)
        a, b = _noisy(grade.chains, melt, 2 * np.pi * frequency, rng)
        shown = temperature + 0.1 * rng.standard_normal(frequency.size).round(1)
        rows += [
            f"{t:.1f};{f:.5g};{x / 1e3:.5g};{y / 1e3:.5g}"
            for t, f, x, y in zip(shown, frequency, a, b, strict=True)
        ]
    return "\n".join(rows) + "\n"


def study_text() -> str:
    """Study file of the three weighed blends."""
    lines = [f"# {MARK}", 'polymer = "hdpe"', "temperature_C = 190", "fraction_uncertainty = 0.002"]
    for key, name in (("fell", "Fell"), ("tarn", "Tarn")):
        lines += [
            "",
            "[[component]]",
            f'name = "{name}"',
            f'distribution = "{key}-gpc.csv"',
            f'sweep = "{key}-190.csv"',
            'calibration = "absolute"',
        ]
    for share in BLENDS:
        percent = round(100 * share)
        lines += [
            "",
            "[[blend]]",
            f'name = "F{percent}T{100 - percent}"',
            f"fractions = {{Fell = {share:.2f}, Tarn = {1 - share:.2f}}}",
            f'sweep = "blend-{percent}.csv"',
        ]
    return "\n".join(lines) + "\n"


def sheet_text(grade: Grade, polymer: Polymer) -> str:
    """Data sheet of Fell: true numbers, rounded, but MFR 2.16 kg, which is five times too high."""
    melt = true_melt(polymer, 190.0)
    response = Relaxation(grade.chains, melt, TRUE_MODEL)
    spectrum = response.spectrum()
    rate: Callable[[float], float] = lambda load: melt_flow_rate(spectrum, load, melt.density)  # noqa: E731
    low, high = rate(2.16), rate(21.6)
    eta0 = response.zero_shear_viscosity
    d = grade.chains
    eta = float(spectrum.complex_viscosity([1.0])[0])
    claims = [
        f"Mw_g_per_mol = {{value = {d.Mw:.3g}, tolerance = 0.10}}",
        f"dispersity = {{value = {d.dispersity:.2g}, tolerance = 0.15}}",
        f"eta0_Pa_s = {{value = {eta0:.3g}, tolerance = 0.15, temperature_C = 190}}",
        f"viscosity = [{{omega_rad_per_s = 1.0, value_Pa_s = {eta:.3g}, temperature_C = 190, "
        "tolerance = 0.10}]",
        "melt_flow = ["
        f"{{load_kg = 2.16, temperature_C = 190, MFR_g_per_10min = {5 * low:.2g}, "
        "tolerance = 0.10}, "
        f"{{load_kg = 21.6, temperature_C = 190, MFR_g_per_10min = {high:.3g}, "
        "tolerance = 0.10}]",
        'long_chain_branching = "none"',
    ]
    return "\n".join([f"# {MARK}", 'polymer = "hdpe"', "[claims]", *claims]) + "\n"


def _read_me() -> str:
    return (
        "INVENTED EXAMPLE. An invented maker of extruded netting and two invented linear\n"
        "polyethylene grades, Fell and Tarn. All numbers come from a script with seeded noise.\n"
        "\n"
        "*-gpc.csv      GPC curves (absolute, nothing seen above 1.2e6 g/mol)\n"
        "*-190.csv      frequency sweeps at 190 C (lot-190.csv: a lot with a tail)\n"
        "*-sweeps.csv   sweeps at three temperatures in one file, as some instruments export\n"
        "blend-*.csv    sweeps of weighed blends; the number is per cent of Fell\n"
        "blends.toml    what was weighed\n"
        "fell-sheet.toml  Fell's data sheet, with one wrong number\n"
    )
