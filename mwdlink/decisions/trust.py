"""What measured blends of known fractions have taught about the rule, to be carried on.

`blendcheck` writes it as `trust.toml`; `blend` reads it and puts the error found into its band.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.decisions.ensemble import ExponentBelief
from mwdlink.errors import InputError


@dataclass(frozen=True)
class Decade:
    """Error of the rule in one decade of frequency.

    Attributes
    ----------
    low, high : float
        [rad/s]
    storage, loss : float
        Root mean square of log10(predicted/measured) of G' and G'' [decades], bias included.
    bias_storage, bias_loss : float
        Mean of the same [decades].
    trusted : bool
        Whether the rule may be trusted there.
    """

    low: float
    high: float
    storage: float
    loss: float
    bias_storage: float = 0.0
    bias_loss: float = 0.0
    trusted: bool = True


@dataclass(frozen=True)
class RuleError:
    """How far one route of prediction missed blends that were left out.

    Attributes
    ----------
    kernel : str
        Kernel, or `measured spectra` for the route without distributions.
    exponent : float
        Mixing exponent the blends prefer [-].
    low, high : float
        Its 90 % interval.
    scatter : float
        Root mean square error of both moduli on left-out blends [decades].
    eta0_scatter : float or None
        The same of the zero-shear viscosity, where it was measured.
    time_factor : float
        Factor on the card's viscosity law the blends ask for [-].
    decades : tuple of Decade
    """

    kernel: str
    exponent: float
    low: float
    high: float
    scatter: float
    eta0_scatter: float | None = None
    time_factor: float = 1.0
    decades: tuple[Decade, ...] = ()

    @property
    def belief(self) -> ExponentBelief:
        """The exponent for predictions."""
        spread = max((self.high - self.low) / 3.29, 1e-3)
        return ExponentBelief(self.exponent, None, None, spread, "of measured blends")

    @property
    def trusted(self) -> tuple[tuple[float, float], ...]:
        """Stretches of frequency [rad/s] in which every decade may be trusted, rising."""
        out: list[tuple[float, float]] = []
        for d in self.decades:
            if not d.trusted:
                continue
            if out and d.low <= out[-1][1] * (1 + 1e-9):
                out[-1] = (out[-1][0], d.high)
            else:
                out.append((d.low, d.high))
        return tuple(out)

    def offset(self, omega: Any, which: str = "loss") -> np.ndarray:
        """Standard deviation of ln(predicted/measured) at frequencies [rad/s].

        Between decades it is interpolated; beyond them the outermost value stands, doubled for
        each decade further out (nothing was learned there).
        """
        w = np.log10(np.atleast_1d(np.asarray(omega, dtype=float)))
        if not self.decades:
            return np.full(w.shape, np.log(10.0) * self.scatter)
        centres = np.array([0.5 * np.log10(d.low * d.high) for d in self.decades])
        # a decade of few points may look better than it is: never below half of the whole
        values = np.array([max(getattr(d, which), 0.5 * self.scatter) for d in self.decades])
        first, last = np.log10(self.decades[0].low), np.log10(self.decades[-1].high)
        beyond = np.maximum(np.maximum(first - w, w - last), 0.0)
        return np.log(10.0) * np.interp(w, centres, values) * 2.0 ** np.minimum(beyond, 4.0)


@dataclass(frozen=True)
class Trust:
    """The content of trust.toml.

    Attributes
    ----------
    polymer : str
    temperature_C : float
    components : tuple of str
    blends : tuple of str
        Used.
    disagreeing : tuple of str
        Blends whose fractions did not agree, left out of account.
    routes : mapping of str to RuleError
        By `sweeps` and `distributions`.
    """

    polymer: str
    temperature_C: float
    components: tuple[str, ...]
    blends: tuple[str, ...]
    disagreeing: tuple[str, ...]
    routes: Mapping[str, RuleError]

    def to_mapping(self) -> dict[str, Any]:
        """In the shape of trust.toml."""
        out: dict[str, Any] = {
            "kind": "trust",
            "polymer": self.polymer,
            "temperature_C": self.temperature_C,
            "components": list(self.components),
            "blends": list(self.blends),
            "disagreeing": list(self.disagreeing),
        }
        for name, r in self.routes.items():
            block: dict[str, Any] = {
                "kernel": r.kernel,
                "mixing_exponent": r.exponent,
                "mixing_exponent_range": [r.low, r.high],
                "scatter_decades": r.scatter,
                "time_factor": r.time_factor,
            }
            if r.eta0_scatter is not None:
                block["eta0_scatter_decades"] = r.eta0_scatter
            block["decade"] = [
                {
                    "omega_low_rad_per_s": d.low,
                    "omega_high_rad_per_s": d.high,
                    "storage_decades": d.storage,
                    "loss_decades": d.loss,
                    "bias_storage_decades": d.bias_storage,
                    "bias_loss_decades": d.bias_loss,
                    "trusted": d.trusted,
                }
                for d in r.decades
            ]
            out[name] = block
        return out

    def to_toml(self) -> str:
        """Text of trust.toml."""
        head = "# What measured blends taught about the rule; `mwdlink blend --trust` reads it.\n"
        return head + toml_text(self.to_mapping())

    @classmethod
    def from_mapping(cls, mapping: Mapping[str, Any], path: str | None = None) -> Trust:
        """From the content of a trust file.

        Raises
        ------
        InputError
            If it is none.
        """

        def number(block: Mapping[str, Any], key: str, default: Any = None) -> float:
            value = block.get(key, default)
            if isinstance(value, bool) or not isinstance(value, (int, float)):
                raise InputError(f"{key} must be a number.", path=path, column=key, remedy=remedy)
            if not np.isfinite(value):
                raise InputError(f"{key} must be finite.", path=path, column=key, remedy=remedy)
            return float(value)

        remedy = "Trust files are written by `mwdlink blendcheck`; write it anew."
        if mapping.get("kind") != "trust":
            raise InputError("this is no trust file.", path=path, remedy=remedy)
        routes = {}
        for name in ("sweeps", "distributions"):
            block = mapping.get(name)
            if block is None:
                continue
            span = block.get("mixing_exponent_range", [])
            if len(span) != 2:
                raise InputError(
                    "mixing_exponent_range must be two numbers.", path=path, remedy=remedy
                )
            decades = tuple(
                Decade(
                    number(d, "omega_low_rad_per_s"),
                    number(d, "omega_high_rad_per_s"),
                    number(d, "storage_decades"),
                    number(d, "loss_decades"),
                    number(d, "bias_storage_decades", 0.0),
                    number(d, "bias_loss_decades", 0.0),
                    bool(d.get("trusted", True)),
                )
                for d in block.get("decade", [])
            )
            eta0 = block.get("eta0_scatter_decades")
            routes[name] = RuleError(
                str(block.get("kernel", "")),
                number(block, "mixing_exponent"),
                float(span[0]),
                float(span[1]),
                number(block, "scatter_decades"),
                None if eta0 is None else float(eta0),
                number(block, "time_factor", 1.0),
                decades,
            )
        if not routes:
            raise InputError("the trust file names no route.", path=path, remedy=remedy)
        return cls(
            str(mapping.get("polymer", "")),
            number(mapping, "temperature_C"),
            tuple(map(str, mapping.get("components", ()))),
            tuple(map(str, mapping.get("blends", ()))),
            tuple(map(str, mapping.get("disagreeing", ()))),
            routes,
        )


def toml_text(mapping: Mapping[str, Any], prefix: str = "") -> str:
    """A mapping as TOML: values first, then tables, then lists of tables."""
    lines = []
    for key, value in mapping.items():
        if not isinstance(value, Mapping) and not _tables(value) and value is not None:
            lines.append(f"{key} = {_value(value)}")
    for key, value in mapping.items():
        name = f"{prefix}{key}"
        if isinstance(value, Mapping):
            lines += ["", f"[{name}]", toml_text(value, f"{name}.").rstrip("\n")]
        elif _tables(value):
            for entry in value:
                lines += ["", f"[[{name}]]", toml_text(entry, f"{name}.").rstrip("\n")]
    return "\n".join(lines) + "\n"


def _tables(value: Any) -> bool:
    return (
        isinstance(value, Sequence)
        and not isinstance(value, str)
        and len(value) > 0
        and isinstance(value[0], Mapping)
    )


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # a JSON string is a TOML basic string, but for one character TOML forbids
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    if isinstance(value, (int, np.integer)):
        return str(int(value))
    return repr(float(value))
