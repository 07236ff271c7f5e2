"""Damaged tables: an answer that is right for every undamaged row, or an error that helps.

Compared with: the undamaged table's numbers (derived), and the rule that damage may lead to an
`InputError` with place and remedy but to no other exception, no NaN and no silent change of unit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.files.tables import read_any
from mwdlink.files.units import UNITS, find_unit

OMEGA = [0.0628, 0.1, 0.251, 0.631, 1.585, 3.981, 10.0, 25.12, 63.1, 158.5]
STORAGE = [12.5, 31.4, 121.75, 402.2, 1204.5, 2911.0, 6702.25, 13400.5, 24100.0, 39050.5]
LOSS = [510.5, 802.25, 1710.5, 3402.0, 6103.5, 9502.25, 14800.5, 21050.0, 29300.5, 38100.0]
MASS = [1234.5, 5000.0, 12000.0, 33000.25, 80000.5, 150000.0, 410000.0, 1.2e6, 3.3e6]
CURVE = [0.0, 0.052, 0.221, 0.517, 0.744, 0.618, 0.2515, 0.041, 0.0]


@dataclass
class Base:
    """A sound table: its bytes and what its rows mean.

    `expected` maps the text of a data line to the inner numbers a reader must find in it.
    """

    name: str
    data: bytes
    encoding: str
    header_lines: tuple[str, ...]
    expected: dict[str, tuple[float, ...]]


def _table(
    name: str,
    head: list[str],
    rows: list[list[str]],
    inner: list[tuple[float, ...]],
    *,
    delimiter: str = ",",
    units: list[str] | None = None,
    preamble: str = "",
    encoding: str = "utf-8",
    end: str = "\n",
    trailing: str = "",
) -> Base:
    header = [delimiter.join(head) + trailing]
    if units:
        header.append(delimiter.join(units) + trailing)
    lines = [delimiter.join(r) + trailing for r in rows]
    text = preamble + "\n".join(header + lines) + "\n"
    data = text.replace("\n", end).encode(encoding)
    return Base(name, data, encoding, tuple(header), dict(zip(lines, inner, strict=True)))


def bases() -> list[Base]:
    """Sound tables of every kind and layout."""
    sweep = list(zip(OMEGA, STORAGE, LOSS, strict=True))
    comma = lambda x: repr(x).replace(".", ",")  # noqa: E731
    out = [
        _table(
            "plain",
            ["omega [rad/s]", "G' [Pa]", "G'' [Pa]"],
            [[repr(x) for x in r] for r in sweep],
            sweep,
            preamble="# invented\n",
        ),
        _table(
            "semicolon",
            ["Frequenz", "Speichermodul", "Verlustmodul", "Status"],
            [[comma(w), comma(a), comma(b), "ok"] for w, a, b in sweep],
            [(w * 2 * math.pi, a * 1e3, b * 1e3) for w, a, b in sweep],
            delimiter=";",
            units=["Hz", "kPa", "kPa", ""],
            preamble="Probe;Muster\nTemperatur;190;°C\n\n",
            encoding="cp1252",
            end="\r\n",
            trailing=";",
        ),
        _table(
            "angle",
            ["f [Hz]", "|η*| [kPa·s]", "δ [°]", "T [K]"],
            [
                [repr(w), repr(a), repr(d), "463.15"]
                for w, a, d in zip(OMEGA, STORAGE, LOSS, strict=True)
                for d in [round(80 - d / 1000, 3)]
            ],
            [
                (
                    w * 2 * math.pi,
                    a * 1e3 * w * 2 * math.pi * math.cos(math.radians(round(80 - d / 1000, 3))),
                    a * 1e3 * w * 2 * math.pi * math.sin(math.radians(round(80 - d / 1000, 3))),
                )
                for w, a, d in zip(OMEGA, STORAGE, LOSS, strict=True)
            ],
            delimiter="\t",
            encoding="utf-16",
        ),
        _table(
            "spaces",
            ["omega", "[rad/s]", "G'", "[MPa]", "G''", "[MPa]"],
            [[repr(x) for x in r] for r in sweep],
            [(w, a * 1e6, b * 1e6) for w, a, b in sweep],
            delimiter="  ",
        ),
        _table(
            "relaxation",
            ["t [ms]", "G(t) [kPa]"],
            [[repr(t), repr(g)] for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
            [(t * 1e-3, g * 1e3) for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
        ),
        _table(
            "flow",
            ["Shear rate [1/s]", "Viscosity [mPa s]"],
            [[comma(t), comma(g)] for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
            [(t, g * 1e-3) for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
            delimiter="\t",
        ),
        _table(
            "spectrum",
            ["tau [s]", "g [Pa]"],
            [[repr(t), repr(g)] for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
            [(t, g) for t, g in zip(OMEGA, STORAGE[::-1], strict=True)],
        ),
        _table(
            "gpc",
            ["M [kg/mol]", "dW/dlog10M"],
            [[repr(m), repr(c)] for m, c in zip(MASS[::-1], CURVE[::-1], strict=True)],
            [(m * 1e3,) for m in MASS[::-1]],
            delimiter=";",
        ),
        _table(
            "slices",
            ["log10 M", "slice weight"],
            [[repr(math.log10(m)), repr(c)] for m, c in zip(MASS, CURVE, strict=True)],
            [(m,) for m in MASS],
        ),
        _table(
            "temperatures",
            ["T [C]", "omega [rad/s]", "G' [Pa]", "G'' [Pa]"],
            [[repr(t), repr(w), repr(a + t), repr(b)] for t in (150.0, 170.0) for w, a, b in sweep],
            [(w, a + t, b) for t in (150.0, 170.0) for w, a, b in sweep],
        ),
        _table(
            "both axes",
            ["M [g/mol]", "log M", "dW/dlogM", "Cum. W [%]"],
            [
                [repr(m), repr(round(math.log10(m), 5)), repr(c), repr(w)]
                for m, c, w in zip(MASS, CURVE, _percent(), strict=True)
            ],
            [(m,) for m in MASS],
            delimiter="\t",
        ),
        _blocks(),
    ]
    return out


def _percent() -> list[float]:
    """The integral of the curve over log10 M, in per cent."""
    x, y = np.log10(MASS), np.array(CURVE)
    rise = np.concatenate([[0.0], np.cumsum(0.5 * (y[1:] + y[:-1]) * np.diff(x))])
    return [float(v) for v in (100 * rise / rise[-1]).round(3)]


def _blocks() -> Base:
    """Two tables in one file, quoted, each with its own header and temperature."""
    head = '"omega [rad/s]","G\' [kPa]","G\'\' [kPa]"'
    lines, expected = [], {}
    for t in (150, 170):
        lines += ["" if lines else "Invented", f"Temperature: {t} C", head]
        for w, a, b in zip(OMEGA, STORAGE, LOSS, strict=True):
            line = f'"{w!r}","{a + t!r}","{b!r}"'
            lines.append(line)
            expected[line] = (w, (a + t) * 1e3, b * 1e3)
    return Base("blocks", "\n".join(lines).encode(), "utf-8", (head, head), expected)


def mutate(data: bytes, rng: np.random.Generator, encoding: str) -> bytes:
    """Damage of one random kind, now and then of two."""
    for _ in range(1 + (rng.random() < 0.25)):
        data = _damage(data, rng, encoding)
    return data


def _damage(data: bytes, rng: np.random.Generator, encoding: str) -> bytes:
    kind = int(rng.integers(10))
    raw = bytearray(data)
    if not raw:
        return data
    if kind == 0:  # flipped bits
        for _ in range(int(rng.integers(1, 6))):
            raw[int(rng.integers(len(raw)))] ^= 1 << int(rng.integers(8))
        return bytes(raw)
    if kind == 1:  # other bytes
        for _ in range(int(rng.integers(1, 6))):
            raw[int(rng.integers(len(raw)))] = int(rng.integers(256))
        return bytes(raw)
    if kind == 2:  # cut anywhere
        return bytes(raw[: int(rng.integers(len(raw)))])
    if kind == 3:  # a piece lost
        a = int(rng.integers(len(raw)))
        return bytes(raw[:a] + raw[a + int(rng.integers(1, 30)) :])
    if kind == 4:  # other printable characters
        for _ in range(int(rng.integers(1, 4))):
            raw[int(rng.integers(len(raw)))] = int(rng.choice(list(b"0123456789.,;'\"eE-+ \t#[]/")))
        return bytes(raw)
    try:
        lines = data.decode(encoding).split("\n")
    except UnicodeDecodeError:
        return bytes(raw[1:])
    if kind == 5:  # rows lost
        for _ in range(int(rng.integers(1, 4))):
            if len(lines) > 1:
                lines.pop(int(rng.integers(len(lines))))
    elif kind == 6:  # rows in another order
        order = rng.permutation(len(lines)) if rng.random() < 0.3 else None
        if order is not None:
            lines = [lines[i] for i in order]
        else:
            i, j = rng.integers(len(lines), size=2)
            lines[i], lines[j] = lines[j], lines[i]
    elif kind == 7:  # a row cut short, or cells lost
        i = int(rng.integers(len(lines)))
        lines[i] = lines[i][: int(rng.integers(len(lines[i]) + 1))]
    elif kind == 8:  # rows repeated, rubbish or texts put in
        i = int(rng.integers(len(lines)))
        rubbish = [lines[i], "", "OVL;OVL;OVL", "--,--,--", "nan,nan,nan", "end of test", "1", "\t",
                   "inf;inf;inf", "1e999,1e999,1e999", "0;0;0", '"', "-1,-1,-1"]  # fmt: skip
        lines.insert(i, str(rng.choice(rubbish)))
    else:  # cells of a row in another order
        i = int(rng.integers(len(lines)))
        for mark in (";", "\t", ","):
            if mark in lines[i]:
                cells = lines[i].split(mark)
                lines[i] = mark.join(cells[k] for k in rng.permutation(len(cells)))
                break
    return "\n".join(lines).encode(encoding, errors="replace")


def arrays(result: Any) -> list[np.ndarray]:
    """The main numbers of any result, the abscissa first."""
    for names in (("omega", "storage", "loss"), ("time", "modulus"), ("rate", "viscosity"),
                  ("tau", "strength"), ("molar_mass", "mass")):  # fmt: skip
        if hasattr(result, names[0]):
            return [getattr(result, n) for n in names]
    raise AssertionError(f"what is {type(result)}?")


def check(base: Base, data: bytes, path: Path) -> str:
    """Read damaged bytes; "answer" or "error"."""
    path.write_bytes(data)
    try:
        found = read_any(path)
    except InputError as error:
        assert error.path == str(path)
        assert error.remedy, str(error)
        whole = ("empty", "binary", "holds no text", "archive", "document", "picture", "program")
        assert error.row is not None or error.column or any(w in error.message for w in whole), (
            f"no place in: {error}"
        )
        return "error"
    results = found if isinstance(found, list) else [found]
    text = data.decode(base.encoding, errors="replace")
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    whole_header = all(lines.count(h) >= base.header_lines.count(h) for h in base.header_lines)
    for result in results:
        for array in arrays(result):
            assert np.all(np.isfinite(array)), "a number that is not finite"
        if whole_header and "points_merged" not in {
            w.code for w in getattr(result, "warnings", ())
        }:
            _check_rows(base, lines, result)
    aside = any(w.code == "tables_left_aside" for r in results for w in getattr(r, "warnings", ()))
    if whole_header and not aside:
        abscissa = np.concatenate([arrays(r)[0] for r in results])
        for line, numbers in base.expected.items():
            if line in lines:
                near = np.min(np.abs(abscissa / numbers[0] - 1))
                assert near < 1e-9, f"the row {line!r} was lost"
    return "answer"


def _check_rows(base: Base, lines: list[str], result: Any) -> None:
    """Every row whose line is undamaged must have its own numbers, in the right unit."""
    rows = getattr(result, "rows", None)
    if rows is None:
        return
    columns = arrays(result)
    for i, row in enumerate(rows):
        expected = base.expected.get(lines[row - 1])
        if expected is None:
            continue
        for column, value in zip(columns, expected, strict=True):
            assert math.isclose(column[i], value, rel_tol=1e-9), (row, column[i], value)


def _run(count: int, seed: int, tmp_path: Path) -> dict[str, int]:
    path = tmp_path / "damaged.csv"
    tally = {"answer": 0, "error": 0}
    sound = bases()
    for i in range(count):
        base = sound[i % len(sound)]
        rng = np.random.default_rng([seed, i])
        data = mutate(base.data, rng, base.encoding)
        try:
            tally[check(base, data, path)] += 1
        except Exception as error:
            raise AssertionError(f"table {base.name!r}, mutation {i}: {data!r}") from error
    return tally


@pytest.mark.parametrize("base", bases(), ids=lambda b: b.name)
def test_the_sound_tables_are_read_right(base: Base, tmp_path: Path) -> None:
    """The undamaged tables give the numbers they were made of (derived)."""
    assert check(base, base.data, tmp_path / "sound.csv") == "answer"
    found = read_any(tmp_path / "sound.csv")
    results = found if isinstance(found, list) else [found]
    assert sum(len(arrays(r)[0]) for r in results) == len(base.expected)


def test_damaged_tables_give_an_answer_or_a_helpful_error(tmp_path: Path) -> None:
    """A seeded sample of 400 damaged tables (derived from the sound ones)."""
    tally = _run(400, 1, tmp_path)
    assert min(tally.values()) > 40, tally


@pytest.mark.full
def test_ten_thousand_damaged_tables(tmp_path: Path) -> None:
    """The same for 10,000 damaged tables."""
    tally = _run(10_000, 2, tmp_path)
    assert min(tally.values()) > 1000, tally


@pytest.mark.parametrize("unit", ["kPa", "MPa", "Pa"])
def test_a_damaged_unit_is_refused_or_is_another_known_unit(unit: str, tmp_path: Path) -> None:
    """Every one-character change of a unit: refused, said to be assumed, or the factor of the unit
    it now spells (compared with the table of units)."""
    path = tmp_path / "unit.csv"
    letters = "aPkKMmGhp/2 -_%1"
    texts = {unit[:i] + unit[i + 1 :] for i in range(len(unit))}
    texts |= {unit[:i] + c + unit[i + 1 :] for i in range(len(unit)) for c in letters}
    texts |= {unit[:i] + c + unit[i:] for i in range(len(unit) + 1) for c in letters}
    for text in sorted(texts):
        path.write_text(
            f"omega [rad/s],G' [{text}],G'' [Pa]\n1,10.5,20\n2,20.5,30\n3,30.5,40\n",
            encoding="utf-8",
        )
        try:
            found = read_any(path)
        except InputError:
            continue
        known = find_unit(text, "modulus")
        if known is None:
            assert "unit_assumed" in {w.code for w in found.warnings}, text
            continue
        assert math.isclose(found.storage[0], 10.5 * UNITS["modulus"][known], rel_tol=1e-12), text
