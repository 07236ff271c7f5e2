"""Tables written in every usual way give the same numbers, exactly.

Compared with: the numbers that were written (derived), read back through the decimal text of each
cell and the factor of its unit. The spellings and layouts are those of common practice.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from mwdlink.errors import InputError
from mwdlink.files.tables import read_any, read_distribution, read_sweep
from mwdlink.files.units import UNITS

QUICK = settings(
    max_examples=120, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)

NAMES = {
    "omega": ["omega", "ω", "Angular frequency", "angular_frequency", "ANGULAR FREQUENCY", "w",
              "Ang. freq.", "Angular frequency ω", "Kreisfrequenz"],
    "f": ["f", "Frequency", "freq.", "frequency (f)", "Frequenz"],
    "G'": ["G'", "G′", "Storage modulus", "storage_modulus", "G prime", "Storage Modulus (G')",
           "Speichermodul", "g'"],
    "G''": ["G''", "G″", 'G"', "Loss modulus", "loss_modulus", "Loss modulus G''", "Verlustmodul"],
    "|eta*|": ["|eta*|", "eta*", "η*", "|η*|", "Complex viscosity", "complex_viscosity"],
    "tan delta": ["tan delta", "tan(delta)", "tan δ", "tan_delta", "Loss factor", "tanδ"],
    "delta": ["delta", "δ", "Phase angle", "phase_angle"],
    "eta'": ["eta'", "η'", "eta prime"],
    "eta''": ["eta''", "η''", "η″"],
}  # fmt: skip
SPELLED = {
    "rad/s": ["rad/s", "rad s-1", "rad·s⁻¹", "rad s^-1", "RAD/S", "rad/sec"],
    "Hz": ["Hz", "HZ", "hz"],
    "Pa": ["Pa", "PA", "N/m2", "N/m²"],
    "kPa": ["kPa", "KPa"],
    "MPa": ["MPa"],
    "Pa s": ["Pa s", "Pa·s", "Pa.s", "Pa*s", "Pas"],
    "kPa s": ["kPa s", "kPa·s"],
    "-": ["-", "1", ""],
    "deg": ["deg", "°", "degrees"],
    "rad": ["rad"],
}
ROUTES = [("G'", "G''"), ("|eta*|", "tan delta"), ("|eta*|", "delta"), ("eta'", "eta''")]
UNIT_OF = {
    "omega": ["rad/s"], "f": ["Hz"], "G'": ["Pa", "kPa", "MPa"], "G''": ["Pa", "kPa", "MPa"],
    "|eta*|": ["Pa s", "kPa s"], "tan delta": ["-"], "delta": ["deg", "rad"],
    "eta'": ["Pa s", "kPa s"], "eta''": ["Pa s"],
}  # fmt: skip
KIND = {"omega": "frequency", "f": "frequency", "G'": "modulus", "G''": "modulus",
        "|eta*|": "viscosity", "tan delta": "number", "delta": "angle", "eta'": "viscosity",
        "eta''": "viscosity"}  # fmt: skip


def write_number(value: float, decimal: str, thousands: str) -> str:
    """A number with at least one decimal place, under the given marks."""
    text = f"{value:.6f}".rstrip("0")
    text = text + "0" if text.endswith(".") else text
    whole, _, part = text.partition(".")
    if thousands and len(whole) > 3:
        groups = []
        while whole:
            groups.insert(0, whole[-3:])
            whole = whole[:-3]
        whole = thousands.join(groups)
    return whole + decimal + part


@st.composite
def sweeps(draw: Any) -> tuple[str, str, dict[str, list[float]], dict[str, str]]:
    """The text of a sweep in some layout, its encoding, its numbers and their units by role."""
    abscissa = draw(st.sampled_from(["omega", "f"]))
    route = draw(st.sampled_from(ROUTES))
    roles = [abscissa, *route]
    count = draw(st.integers(3, 12))
    first = draw(st.floats(0.01, 5))
    numbers: dict[str, list[float]] = {abscissa: [round(first * 1.7**i, 5) for i in range(count)]}
    high = {"tan delta": 50.0, "delta": 1.5}
    units = {r: draw(st.sampled_from(UNIT_OF[r])) for r in roles}
    for role in route:
        top = high.get(role, 50_000.0) * (50 if units[role] == "deg" else 1)
        numbers[role] = [
            round(x, 4)
            for x in draw(st.lists(st.floats(0.01, top), min_size=count, max_size=count))
        ]
        numbers[role] = [max(x, 0.01) for x in numbers[role]]
    numbers["note"] = [0.0] * count
    # bars around a name and bars between cells exclude each other
    marks = [",", ";", "\t", "  "] if "|eta*|" in roles else [",", ";", "\t", "  ", "|"]
    delimiter = draw(st.sampled_from(marks))
    decimal = draw(st.sampled_from([".", ","] if delimiter not in ", " else ["."]))
    other = "," if decimal == "." else "."
    thousands = draw(st.sampled_from(["", "", other, " ", "\u202f", "'"]))
    if delimiter in (",", "  ") and thousands:
        thousands = "" if delimiter == "  " else "'"
    quoted = delimiter == "," and draw(st.booleans())
    style = draw(st.sampled_from(["[]", "()", "row", "row[]", "none"]))
    if delimiter == "  " and style.startswith("row"):
        style = "[]"
    order = draw(st.permutations([*roles, *(["note"] if delimiter != "  " else [])]))
    head, unit_row = [], []
    for role in order:
        if role == "note":
            head.append("Status")
            unit_row.append("")
            continue
        name = draw(st.sampled_from(NAMES[role]))
        unit = draw(st.sampled_from(SPELLED[units[role]]))
        must = role in ("f", "delta") or units[role] not in ("rad/s", "Pa", "Pa s", "-")
        if style == "[]" or (style == "none" and must):
            name = f"{name} [{unit}]" if unit else name
        elif style == "()":
            name = f"{name} ({unit})" if unit else name
        head.append(name)
        unit_row.append(f"[{unit}]" if style == "row[]" else unit)
    lines = []
    for _ in range(draw(st.integers(0, 2))):
        above = ["# made up", "#", "# sample: X", "Report of a test", ""]
        lines.append(draw(st.sampled_from(above)))
    trailing = delimiter if delimiter in ";\t" and draw(st.booleans()) else ""
    lines.append(delimiter.join(head) + trailing)
    if style.startswith("row") and any(u.strip("[]") not in ("", "-", "1") for u in unit_row):
        lines.append(delimiter.join(unit_row) + trailing)
    rows = draw(st.permutations(range(count)))
    for k in rows:
        cells = []
        for role in order:
            cell = "ok" if role == "note" else write_number(numbers[role][k], decimal, thousands)
            cells.append(f'"{cell}"' if quoted else cell)
        lines.append(delimiter.join(cells) + trailing)
        if draw(st.integers(0, 9)) == 0:
            between = ["", "# a remark", delimiter * 3 if trailing else ""]
            lines.append(draw(st.sampled_from(between)))
    end = draw(st.sampled_from(["\n", "\r\n", "\r"]))
    text = end.join(lines) + draw(st.sampled_from(["", end, end * 2]))
    fits = [e for e in ("utf-8", "utf-8-sig", "utf-16", "utf-16-le", "latin-1", "cp1252")
            if _encodes(text, e)]  # fmt: skip
    numbers["rows"] = [float(k) for k in rows]
    return text, draw(st.sampled_from(fits)), numbers, units


def _encodes(text: str, encoding: str) -> bool:
    try:
        text.encode(encoding)
    except UnicodeEncodeError:
        return False
    return True


def inner(role: str, unit: str, values: list[float]) -> np.ndarray:
    """The written numbers in the inner unit."""
    return np.array(values) * UNITS[KIND[role]][unit]


@QUICK
@given(table=sweeps())
def test_a_sweep_in_any_usual_writing(table: Any, tmp_path: Path) -> None:
    """The moduli are those of the written numbers, to rounding (derived)."""
    text, encoding, numbers, units = table
    path = tmp_path / "sweep.csv"
    path.write_bytes(text.encode(encoding))
    # thousands separators alone may leave the decimal mark open; then the table must be refused
    found = read_sweep(path)
    abscissa = "omega" if "omega" in units else "f"
    omega = inner(abscissa, units[abscissa], numbers[abscissa])
    columns = {r: inner(r, u, numbers[r]) for r, u in units.items()}
    if "G'" in columns:
        storage, loss = columns["G'"], columns["G''"]
    elif "eta'" in columns:
        storage, loss = columns["eta''"] * omega, columns["eta'"] * omega
    else:
        tan = columns["tan delta"] if "tan delta" in columns else np.tan(columns["delta"])
        size = columns["|eta*|"] * omega
        storage, loss = size / np.sqrt(1 + tan**2), size * tan / np.sqrt(1 + tan**2)
    assert np.allclose(found.omega, omega, rtol=1e-14, atol=0)
    assert np.allclose(found.storage, storage, rtol=1e-12, atol=0)
    assert np.allclose(found.loss, loss, rtol=1e-12, atol=0)
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    for row in found.rows:
        assert any(c.isdigit() for c in lines[row - 1])


AXES = ["M [g/mol]", "M (Da)", "Molar mass [g/mol]", "MW", "M [kg/mol]", "log10 M", "log M",
        "lg M", "log(M/(g/mol))", "ln M", "M_g_per_mol"]  # fmt: skip
CURVES = {
    "dW/dlog10M": "dW/dlog10M", "dW/dlogM": "dW/dlog10M", "dw/d(log M)": "dW/dlog10M",
    "dwt/d(logM)": "dW/dlog10M", "w(log M)": "dW/dlog10M", "dW/dlnM": "dW/dlnM", "dW/dM": "dW/dM",
    "cumulative W": "cumulative", "Cumulative weight fraction": "cumulative",
    "slice weight": "slice_weight", "Area": "slice_weight", "dN/dlog10M": "dN/dlog10M",
    "dN/dlnM": "dN/dlnM", "dN/dM": "dN/dM", "slice number": "slice_number",
}  # fmt: skip


@QUICK
@given(
    axis=st.sampled_from(AXES),
    curve=st.sampled_from(sorted(CURVES)),
    falling=st.booleans(),
    percent=st.booleans(),
    delimiter=st.sampled_from([",", ";", "\t"]),
    decimal=st.sampled_from([".", ","]),
    swapped=st.booleans(),
)
def test_a_distribution_in_any_usual_writing(
    axis: str,
    curve: str,
    falling: bool,
    percent: bool,
    delimiter: str,
    decimal: str,
    swapped: bool,
    tmp_path: Path,
) -> None:
    """The same distribution as from the arrays directly (derived)."""
    from mwdlink.chains.distribution import Distribution

    mass = np.geomspace(1234.5, 2.3e6, 25)
    values = np.exp(-0.5 * (np.log(mass / 8e4) / 1.1) ** 2)
    kind = CURVES[curve]
    if kind == "cumulative":
        values = np.cumsum(values) / values.sum()
    if percent:
        values = values * 100
    if falling:
        mass, values = mass[::-1], values[::-1]
    if axis.startswith(("log", "lg")):
        written = np.log10(mass)
        back = lambda x: 10.0**x  # noqa: E731
    elif axis.startswith("ln"):
        written = np.log(mass)
        back = lambda x: 10.0 ** (x / math.log(10))  # noqa: E731
    elif "kg" in axis:
        written = mass / 1e3
        back = lambda x: x * 1e3  # noqa: E731
    else:
        written = mass
        back = lambda x: x  # noqa: E731
    if delimiter == ",":
        decimal = "."
    pairs = [(repr(float(a)), repr(float(b))) for a, b in zip(written, values, strict=True)]
    names = (axis, curve + (" [%]" if percent else ""))
    lines = [names, *pairs]
    if swapped:
        lines = [(b, a) for a, b in lines]
    text = "\n".join(
        delimiter.join(c.replace(".", decimal) if i else c for c in line)
        for i, line in enumerate(lines)
    )
    path = tmp_path / "gpc.csv"
    path.write_text(text, encoding="utf-8")
    found = read_distribution(path, calibration="absolute")
    expected = Distribution.from_table(
        back(np.array([float(a) for a, _ in pairs])), values, kind=kind, calibration="absolute"
    )
    assert np.allclose(found.molar_mass, expected.molar_mass, rtol=1e-12, atol=0)
    assert np.allclose(found.mass, expected.mass, rtol=1e-9, atol=1e-15)


@QUICK
@given(
    header=st.lists(st.text(st.characters(codec="utf-8", exclude_characters="\r\n\0"),
                            max_size=12), min_size=1, max_size=6),
    body=st.lists(st.lists(st.text(st.sampled_from("0123456789.,-+eE aN;#\"'\t"), max_size=9),
                           max_size=6), max_size=8),
    delimiter=st.sampled_from([",", ";", "\t", " "]),
)  # fmt: skip
def test_any_text_gives_an_answer_or_an_input_error(
    header: list[str], body: list[list[str]], delimiter: str, tmp_path: Path
) -> None:
    """No other exception, whatever the text (the contract of the readers)."""
    path = tmp_path / "any.csv"
    for head in (header, ["omega [rad/s]", "G' [Pa]", "G'' [Pa]"]):
        text = "\n".join(delimiter.join(row) for row in [head, *body])
        path.write_bytes(text.encode("utf-8", errors="surrogatepass"))
        try:
            read_any(path)
        except InputError as error:
            assert error.path and error.remedy


@QUICK
@given(data=st.binary(min_size=0, max_size=300))
def test_any_bytes_give_an_answer_or_an_input_error(data: bytes, tmp_path: Path) -> None:
    """No other exception, whatever the bytes (the contract of the readers)."""
    path = tmp_path / "any.csv"
    path.write_bytes(data)
    try:
        read_any(path)
    except InputError as error:
        assert error.path and error.remedy
