"""What goes into a blend: components with what is known of each, and a study of measured blends."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.gpc_scale import as_own
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.validity import DILATED_TUBE_GR, struglinski_graessley

CONSTRAINT_RELEASE_GR = 0.5
"""Above this Gr constraint release rules a dilute long component (Watanabe 2004, published)."""

WIDEST_RATIO = 10.0
"""Molar-mass ratio up to which blending rules were held against data (Franck & Meissner 1984,
published, attribution recalled)."""

SAME_TEMPERATURE_K = 0.5


@dataclass(frozen=True, eq=False)
class Component:
    """One component of a blend.

    Attributes
    ----------
    name : str
    distribution : Distribution or None
    sweep : Sweep or None
        At least one of the two.
    temperature_C : float or None
        Of the sweep, where the sweep itself does not say [C].
    polymer : str or None
        Name of its polymer, where it is stated; another one than the blend's is refused.
    branched : bool
        Long-chain branched, as stated.
    filler : float
        Weight share of filler in the component as weighed in [-]; fractions are of polymer.
    eta0_Pa_s : float or None
        Measured zero-shear viscosity, for `calibrate` [Pa s].
    """

    name: str
    distribution: Distribution | None = None
    sweep: Sweep | None = None
    temperature_C: float | None = None
    polymer: str | None = None
    branched: bool = False
    filler: float = 0.0
    eta0_Pa_s: float | None = None


@dataclass(frozen=True, eq=False)
class MeasuredBlend:
    """A blend of weighed fractions and its sweep.

    Attributes
    ----------
    name : str
    fractions : mapping of str to float
        Component name to weight fraction of polymer [-], sum 1.
    sweep : Sweep or None
    temperature_C : float or None
        Of the sweep, where the sweep itself does not say [C].
    """

    name: str
    fractions: Mapping[str, float]
    sweep: Sweep | None = None
    temperature_C: float | None = None


@dataclass(frozen=True, eq=False)
class Study:
    """Components and measured blends of one polymer.

    Attributes
    ----------
    polymer : Polymer
    components : tuple of Component
    blends : tuple of MeasuredBlend
    temperature_C : float or None
        Everything is taken to this temperature [C]; None: the card's own.
    fraction_uncertainty : float
        Standard error of a weighed fraction [-].
    paths : tuple of str
        Files it was read from.
    warnings : tuple of Caution
    """

    polymer: Polymer
    components: tuple[Component, ...]
    blends: tuple[MeasuredBlend, ...] = ()
    temperature_C: float | None = None
    fraction_uncertainty: float = 0.002
    paths: tuple[str, ...] = ()
    warnings: tuple[Caution, ...] = ()

    @property
    def melt(self) -> Melt:
        """The polymer at the study's temperature."""
        return self.polymer.melt(self.temperature_C)

    def shares(self, blend: MeasuredBlend) -> np.ndarray:
        """Fractions of a blend in the order of the components, shape (n,)."""
        return np.array([float(blend.fractions.get(c.name, 0.0)) for c in self.components])


def as_components(
    given: Sequence[Any], names: Sequence[str] | None = None
) -> tuple[Component, ...]:
    """Components from distributions, sweeps or components.

    Raises
    ------
    InputError
        If a name is used twice, or one of them is neither.
    """
    letters = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"
    out = []
    for i, x in enumerate(given):
        name = names[i] if names is not None else letters[i % 26]
        if isinstance(x, Component):
            out.append(x)
        elif isinstance(x, Distribution):
            out.append(Component(x.label or name, distribution=x))
        elif isinstance(x, Sweep):
            out.append(Component(x.label or name, sweep=x))
        else:
            raise InputError(
                f"a component must be a distribution or a sweep, not {type(x).__name__}"
            )
    used = [c.name for c in out]
    if len(set(used)) < len(used):
        if any(isinstance(x, Component) for x in given):
            raise InputError("two components have the same name.", remedy="Give each its own.")
        out = [replace(c, name=letters[i % 26]) for i, c in enumerate(out)]
    for c in out:
        if c.distribution is None and c.sweep is None:
            raise InputError(
                f"component {c.name!r} has neither a distribution nor a sweep.",
                remedy="One of the two is enough.",
            )
    if not out:
        raise InputError("a blend needs components.")
    return tuple(out)


def check_fractions(fractions: Any, count: int) -> np.ndarray:
    """Weight fractions that sum to 1 or 100, as fractions, shape (n,).

    Raises
    ------
    InputError
        Wrong number, negative, or another sum.
    """
    f = np.atleast_1d(np.asarray(fractions, dtype=float))
    if f.shape != (count,):
        raise InputError(
            f"{f.size} fractions for {count} components.", remedy="Give one for each, in order."
        )
    if not np.all(np.isfinite(f)) or np.any(f < 0):
        raise InputError("fractions must be 0 or more.")
    total = float(f.sum())
    for whole in (1.0, 100.0):
        if abs(total / whole - 1.0) < 2e-3:
            return f / total
    raise InputError(
        f"the fractions sum to {total:g}, neither 1 nor 100.",
        remedy="Give weight fractions of polymer; a masterbatch's carrier counts as polymer.",
    )


def at_temperature(
    sweep: Sweep, stated_C: float | None, polymer: Polymer, wanted_C: float
) -> tuple[Sweep, tuple[Caution, ...]]:
    """A sweep taken to the wanted temperature by the card's shift law, and what was done."""
    own = sweep.temperature_C if sweep.temperature_C is not None else stated_C
    if own is None:
        note = Caution(
            "temperature_assumed",
            f"{sweep.label or sweep.path or 'A sweep'} does not state its temperature; taken as "
            f"{wanted_C:g} C.",
        )
        return sweep, (note,)
    if abs(own - wanted_C) <= SAME_TEMPERATURE_K:
        return sweep, ()
    there, here = polymer.melt(own), polymer.melt(wanted_C)
    moved = sweep.shifted(there.a_T / here.a_T, here.b_T / there.b_T)
    note = Caution(
        "sweep_shifted",
        f"{sweep.label or sweep.path or 'A sweep'} was measured at {own:g} C and taken to "
        f"{wanted_C:g} C by the card's shift law (factor {there.a_T / here.a_T:.3g}).",
    )
    return replace(moved, temperature_C=wanted_C), (note, *there.warnings)


def settled(
    components: Sequence[Component], polymer: Polymer, temperature_C: float
) -> tuple[tuple[Component, ...], tuple[Caution, ...]]:
    """Components at one temperature, refused or warned of where the rule does not hold.

    Masses equivalent to polystyrene are converted where the card can.

    Raises
    ------
    InputError
        A component of another polymer.
    """
    out, notes = [], []
    for c in components:
        if c.polymer is not None and c.polymer.casefold() != polymer.name.casefold():
            raise InputError(
                f"component {c.name!r} is {c.polymer}, the blend {polymer.name}: blends of "
                "different polymers are not predicted.",
                remedy="They rarely mix on the scale of chains; no rule here holds for them.",
            )
        if c.branched:
            notes.append(
                Caution(
                    "component_branched",
                    f"{c.name} is long-chain branched: the mixing rule is for linear chains. Its "
                    "own spectrum may still serve, its distribution does not.",
                )
            )
        if c.filler > 0:
            notes.append(
                Caution(
                    "component_filled",
                    f"{c.name} holds {100 * c.filler:.3g} wt% filler. Fractions are of polymer, a "
                    "masterbatch's carrier included; the filler's own effect is not in the model.",
                )
            )
        sweep = c.sweep
        if sweep is not None:
            sweep, said = at_temperature(sweep, c.temperature_C, polymer, temperature_C)
            notes.extend(said)
            notes.extend(sweep.warnings)
        distribution = c.distribution
        if distribution is not None:
            distribution = as_own(distribution, polymer)
            notes.extend(distribution.warnings)
        out.append(replace(c, sweep=sweep, distribution=distribution))
    return tuple(out), merge_cautions(notes)


def fractions_without_filler(
    components: Sequence[Component], fractions: np.ndarray
) -> tuple[Caution, ...]:
    """Of filled components, what the fractions of polymer would be of bags weighed with filler."""
    filler = np.array([c.filler for c in components])
    if not np.any(filler > 0):
        return ()
    polymer = fractions * (1.0 - filler)
    if not polymer.sum() > 0:
        return ()
    told = ", ".join(
        f"{100 * x:.3g} % {c.name}"
        for c, x in zip(components, polymer / polymer.sum(), strict=True)
    )
    text = (
        f"The fractions are taken as of polymer. If the bags were weighed with their filler, those "
        f"of polymer are {told}."
    )
    return (Caution("fractions_of_polymer", text),)


@dataclass(frozen=True)
class Validity:
    """Whether the rule was ever meant for such a pair.

    Attributes
    ----------
    Gr : float or None
        M_long M_e^2/M_short^3 with the 0.8 of M_e that tables print [-].
    ratio : float or None
        Molar-mass ratio of the longest to the shortest component.
    Z : mapping of str to float
        Entanglements of each component's Mw.
    warnings : tuple of Caution
    """

    Gr: float | None
    ratio: float | None
    Z: Mapping[str, float]
    warnings: tuple[Caution, ...]


def validity_of(
    components: Sequence[Component], fractions: np.ndarray | None, melt: Melt
) -> Validity:
    """Gr, the dilated tube, components below M_c, ratios beyond practice.

    Molar masses are the components' Mw; components without a distribution give none.

    References
    ----------
    .. [1] Park & Larson, Macromolecules 37 (2004) 597 (published).
    .. [2] Watanabe et al., Macromolecules 37 (2004) 1937 (published).
    """
    known = {c.name: c.distribution.Mw for c in components if c.distribution is not None}
    notes: list[Caution] = []
    if len(known) < len(components):
        missing = ", ".join(c.name for c in components if c.distribution is None)
        notes.append(
            Caution(
                "validity_unknown",
                f"Without the distribution of {missing} it cannot be judged whether the pair lies "
                "within the rule's reach (Gr, molar-mass ratio, critical molar mass).",
            )
        )
    z = {name: float(melt.Z(m)) for name, m in known.items()}
    gr = ratio = None
    if len(known) >= 2:
        longest, shortest = max(known.values()), min(known.values())
        ratio = longest / shortest
        gr = struglinski_graessley(longest, shortest, 0.8 * melt.entanglement_molar_mass)
        if gr > CONSTRAINT_RELEASE_GR:
            notes.append(
                Caution(
                    "constraint_release",
                    f"Gr = {gr:.2g} is above {CONSTRAINT_RELEASE_GR}: constraint release rules the "
                    "relaxation of a dilute long component (Watanabe et al. 2004, published); "
                    "double reptation was not made for it.",
                )
            )
        elif gr > DILATED_TUBE_GR:
            notes.append(
                Caution(
                    "dilated_tube",
                    f"Gr = {gr:.2g} is above {DILATED_TUBE_GR}: the long chains reptate in a tube "
                    "dilated by the short ones (Park and Larson 2004, published), and double "
                    "reptation misplaces their relaxation.",
                )
            )
        if ratio > WIDEST_RATIO:
            notes.append(
                Caution(
                    "ratio_beyond_practice",
                    f"The components' Mw differ by a factor {ratio:.3g}; blending rules were held "
                    f"against data up to about {WIDEST_RATIO:g} (published).",
                )
            )
    critical = melt.critical_molar_mass
    if critical is not None:
        for name, m in known.items():
            if m < critical:
                notes.append(
                    Caution(
                        "component_unentangled",
                        f"{name} (Mw {m:.3g} g/mol) lies below the critical molar mass "
                        f"{critical:.3g}: it acts as a solvent and shifts the friction itself, "
                        "which is not in the model.",
                    )
                )
    return Validity(gr, ratio, z, tuple(notes))
