"""The names columns go by: one table from spellings to roles.

A header is recognised only when *all* its words are used up by spellings of one role, so that
`G' low` or `storage modulus residual` is nobody's. Symbols of one letter keep their case (t is a
time, T a temperature, M a molar mass); everything else does not.
"""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass
from functools import lru_cache


@dataclass(frozen=True)
class Role:
    """What a column can be.

    Attributes
    ----------
    name : str
        The name used in messages and in `--column name=header`.
    kind : str
        Kind of quantity (key of `units.UNITS`).
    words : tuple of str
        Spellings in lower case, after `plain_name`.
    symbols : tuple of str
        Spellings whose case matters.
    assumed : str or None
        The unit taken (and said) when none is given; None: it must be given.
    """

    name: str
    kind: str
    words: tuple[str, ...]
    symbols: tuple[str, ...] = ()
    assumed: str | None = None


ROLES: dict[str, Role] = {
    r.name: r
    for r in (
        Role(
            "omega",
            "frequency",
            ("omega", "angular frequency", "ang frequency", "ang freq", "angular freq",
             "circular frequency", "frequency angular", "kreisfrequenz", "pulsation"),
            ("w",),
            "rad/s",
        ),
        Role("f", "frequency", ("ordinary frequency", "cyclic frequency"), ("f",), "Hz"),
        # rad/s or Hz: only its unit can tell
        Role("frequency", "frequency", ("frequency", "freq", "frequenz", "fréquence", "frequence")),
        Role(
            "G'",
            "modulus",
            ("g'", "storage modulus", "g prime", "gprime", "elastic modulus",
             "shear storage modulus", "storage", "speichermodul", "module de conservation"),
            (),
            "Pa",
        ),
        Role(
            "G''",
            "modulus",
            ("g''", "loss modulus", "g double prime", "gdoubleprime", "g dprime", "g prime prime",
             "viscous modulus", "shear loss modulus", "loss", "verlustmodul", "module de perte"),
            (),
            "Pa",
        ),
        Role("|G*|", "modulus", ("g*", "complex modulus", "complex shear modulus", "abs g*",
                                 "g star", "komplexer modul"), (), "Pa"),
        Role("|eta*|", "viscosity", ("eta*", "complex viscosity", "complex shear viscosity",
                                     "abs eta*", "eta star", "komplexe viskosität"), (), "Pa s"),
        Role("eta'", "viscosity", ("eta'", "eta prime"), (), "Pa s"),
        Role("eta''", "viscosity", ("eta''", "eta double prime"), (), "Pa s"),
        Role("tan delta", "number", ("tan delta", "tandelta", "loss factor", "damping factor",
                                     "loss tangent", "tan d", "verlustfaktor"), (), "-"),
        Role("delta", "angle", ("delta", "phase angle", "loss angle", "phase shift",
                                "phase shift angle", "phase", "phasenwinkel")),
        Role("T", "temperature", ("temperature", "temp", "sample temperature", "temperatur",
                                  "température"), ("T",), None),
        Role("sigma'", "fraction", ("sigma'", "sigma g'", "rel sigma g'", "relative error g'",
                                    "rel error g'"), (), "-"),
        Role("sigma''", "fraction", ("sigma''", "sigma g''", "rel sigma g''", "relative error g''",
                                     "rel error g''"), (), "-"),
        Role("strain", "fraction", ("strain", "gamma", "shear strain", "strain amplitude",
                                    "deformation", "gamma0", "gamma 0")),
        Role("torque", "torque", ("torque", "drehmoment", "couple")),
        Role("t", "time", ("time", "zeit", "temps", "step time"), ("t",), "s"),
        Role("G", "modulus", ("g t", "relaxation modulus", "shear relaxation modulus", "modulus",
                              "stress relaxation modulus"), ("G",), "Pa"),
        Role("sigma", "fraction", ("sigma", "relative error", "rel error", "rel sigma"), (), "-"),
        Role("rate", "rate", ("rate", "shear rate", "gamma dot", "gammadot", "gammadot dot",
                              "dgamma/dt", "scherrate", "strain rate"), (), "1/s"),
        Role("eta", "viscosity", ("eta", "viscosity", "shear viscosity", "steady viscosity",
                                  "steady shear viscosity", "viskosität", "viscosité"), (), "Pa s"),
        Role("tau", "time", ("tau", "relaxation time", "lambda", "tau i", "lambda i"), (), "s"),
        Role("g", "modulus", ("g i", "strength", "modal strength", "mode strength",
                              "modal modulus"), ("g",), "Pa"),
        Role("M", "molar mass", ("molar mass", "molecular weight", "molecular mass", "mol weight",
                                 "mol wt", "mw", "molmasse", "molare masse", "masse molaire"),
             ("M",), "g/mol"),
        Role("log10 M", "molar mass", (), (), "g/mol"),
        Role("log M", "molar mass", (), (), "g/mol"),
        Role("ln M", "molar mass", (), (), "g/mol"),
        Role("dW/dlog10M", "signal", (), (), "-"),
        Role("dW/dlogM", "signal", (), (), "-"),
        Role("dW/dlnM", "signal", (), (), "-"),
        Role("dW/dM", "signal", (), (), "-"),
        Role("cumulative W", "signal", ("cumulative", "cumulative w", "cumulative weight", "cum w",
                                        "cumulative weight fraction", "cum weight fraction",
                                        "cumulative weight percent", "cum weight", "cumul w",
                                        "cumulative mass fraction", "cumulative mass",
                                        "integral weight fraction", "cumulative wt",
                                        "cum wt fraction", "cumulative distribution"), (), "-"),
        Role("slice weight", "signal", ("slice weight", "slice area", "slice height", "area",
                                        "height", "slice mass", "slice concentration",
                                        "ri signal", "dri signal", "slice w"), (), "-"),
        Role("dN/dlog10M", "signal", (), (), "-"),
        Role("dN/dlogM", "signal", (), (), "-"),
        Role("dN/dlnM", "signal", (), (), "-"),
        Role("dN/dM", "signal", (), (), "-"),
        Role("slice number", "signal", ("slice number", "slice moles", "slice n"), (), "-"),
        # a name without the derivative it stands for: never guessed
        Role("W?", "signal", ("weight fraction", "mass fraction", "wt", "wt fraction", "weight",
                              "w m", "w f", "differential weight fraction", "distribution",
                              "differential distribution", "wf"), ("W",)),
        Role("elution", "any", ("elution volume", "elution time", "retention volume",
                                "retention time", "ve", "rv", "elution")),
    )
}  # fmt: skip

_WORDS = {word: role.name for role in ROLES.values() for word in role.words}
_SYMBOLS = {symbol: role.name for role in ROLES.values() for symbol in role.symbols}

_GREEK = {
    "ω": " omega ", "Ω": " omega ", "η": " eta ", "δ": " delta ", "τ": " tau ", "γ": " gamma ",
    "σ": " sigma ", "λ": " lambda ", "ϖ": " omega ",
}  # fmt: skip
_PRIMES = (("″", "''"), ("”", "''"), ("“", "''"), ('"', "''"), ("‶", "''"), ("′", "'"),
           ("’", "'"), ("‘", "'"), ("´", "'"), ("`", "'"), ("ʹ", "'"), ("ʺ", "''"))  # fmt: skip

# squeezed spellings of the distribution's columns: derivative forms and logarithms of M
_MASS = r"(?:mw|m|mr|molarmass|molecularweight|molmass|molwt|mi)"
_LOG = rf"(?:log10|lg){_MASS}"
_AXIS = {
    "log10 M": re.compile(rf"^{_LOG}$"),
    "log M": re.compile(rf"^log{_MASS}$"),
    "ln M": re.compile(rf"^(?:ln|loge){_MASS}$"),
}
_TOP = {"W": r"(?:wf|wt|w|wn|weight|mass|weightfraction|wi)", "N": r"(?:nf|n|x|number)"}
_DERIVATIVE = {
    f"d{letter}/d{axis}": re.compile(rf"^(?:d{top}/d{pattern}|d{top}d{pattern}|{bare}{pattern})$")
    for letter, top in _TOP.items()
    for axis, pattern, bare in (
        ("log10M", _LOG, letter.lower()),
        ("logM", rf"log{_MASS}", letter.lower()),
        ("lnM", rf"(?:ln|loge){_MASS}", letter.lower()),
        # w(M) is left out: both dW/dM and dW/dlog M are written so
        ("M", _MASS, "(?!)"),
    )
}


def plain_name(text: str) -> str:
    """A header's name in plain letters: Greek spelled out, primes unified, punctuation gone."""
    for old, new in _PRIMES:
        text = text.replace(old, new)
    text = unicodedata.normalize("NFKC", text)
    text = re.sub("γ[\u0307˙]|γ-?dot|gamma-dot", " gamma dot ", text)
    for old, new in _GREEK.items():
        text = text.replace(old, new)
    text = re.sub(r"\s+(?=['*])", "", text)
    text = re.sub(r"[\s_\-|()\[\]{}<>^.,:;=\u0307\u200b\ufeff#]+", " ", text)
    return text.strip()


@lru_cache(maxsize=4096)
def role_of(name: str) -> str | None:
    """The role whose spellings use up the whole name, or None."""
    if len(name) > 120:
        return None
    squeezed = re.sub(r"[\s_\-()\[\]{}^.,·*|]+", "", unicodedata.normalize("NFKC", name))
    if re.match(r"[WN](log|lg|ln)", squeezed):
        # a capital letter as a function of log M may be the density or its integral
        return "W?"
    squeezed = squeezed.lower()
    for table in (_AXIS, _DERIVATIVE):
        for role, pattern in table.items():
            if pattern.match(squeezed):
                return role
    plain = plain_name(name)
    tokens = plain.split(" ")
    if not plain or len(tokens) > 8:
        return None
    if plain == "w":
        return "omega"
    return _consume(tokens)


def _consume(tokens: list[str]) -> str | None:
    whole = _lookup(tokens)
    if whole is not None:
        return whole
    for cut in range(1, len(tokens)):
        first, second = _lookup(tokens[:cut]), _lookup(tokens[cut:])
        if first is None or second is None:
            continue
        if first == second:
            return first
        # "frequency omega": the symbol says which
        pair = {first, second}
        if "frequency" in pair and pair & {"omega", "f"}:
            return (pair - {"frequency"}).pop()
    return None


def _lookup(tokens: list[str]) -> str | None:
    text = " ".join(tokens)
    return _SYMBOLS.get(text) or _WORDS.get(text.lower())
