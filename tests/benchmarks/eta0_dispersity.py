"""Zero-shear viscosity against dispersity at fixed Mw, linear HDPE: this model and the published.

    python tests/benchmarks/eta0_dispersity.py

Prints the tables of docs/hdpe-eta0-dispersity.md: eta0 over the narrow-fraction law at the same
Mw. Nothing is asserted: the published independence (Stadler et al. 2006) and double reptation
disagree, and the tables show by how much.
"""

from __future__ import annotations

import numpy as np

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

DISPERSITIES = (1.5, 2.0, 3.0, 4.0, 8.0, 16.0)
KERNELS = ("exponential", "reptation", "power-law")
EXPONENTS = (2.0, 2.25)
MW = 1.5e5
# a log-normal of dispersity 16 owes a third of its eta0 to chains no reactor makes
LONGEST = 1.0e7


def families_of(dispersity: float) -> dict[str, Distribution]:
    """Log-normal, the same without chains beyond 1e7 g/mol (Mw set back), and Schulz-Zimm."""
    whole = families.lognormal(MW, dispersity)
    held = whole.molar_mass < LONGEST
    cut = Distribution.from_nodes(whole.molar_mass[held], whole.mass[held])
    return {
        "log-normal": whole,
        "log-normal, none above 1e7": cut.scaled(MW / cut.Mw),
        "Schulz-Zimm": families.schulz_zimm(MW, dispersity),
    }


def table(kernel: str, exponent: float, rouse: bool = True) -> dict[str, np.ndarray]:
    """eta0/law(Mw) by family, one value a dispersity."""
    melt = builtin("hdpe").melt()
    law = melt.zero_shear_law(MW)
    out: dict[str, list[float]] = {}
    for dispersity in DISPERSITIES:
        for name, d in families_of(dispersity).items():
            r = Relaxation(d, melt, Model(kernel, exponent, rouse))
            out.setdefault(name, []).append(r.zero_shear_viscosity / law)
    return {name: np.array(v) for name, v in out.items()}


def main() -> None:
    head = "".join(f" {d:g} |" for d in DISPERSITIES)
    for exponent in EXPONENTS:
        print(f"\nExponent {exponent:g}\n\n| kernel | family |{head} spread, decades |")
        print("|---|---|" + "---|" * (len(DISPERSITIES) + 1))
        for kernel in KERNELS:
            for family, ratio in table(kernel, exponent).items():
                cells = "".join(f" {x:.3g} |" for x in ratio)
                spread = np.log10(ratio.max() / ratio.min())
                print(f"| {kernel} | {family} |{cells} {spread:.2f} |")
    bare = table("exponential", 2.0, rouse=False)
    print("\nWithout the Rouse part, exponential kernel, exponent 2:")
    for family, ratio in bare.items():
        print(f"{family}: " + ", ".join(f"{x:.3g}" for x in ratio))


if __name__ == "__main__":
    main()
