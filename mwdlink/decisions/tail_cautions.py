"""The cautions that travel with a tail's result."""

from __future__ import annotations

from mwdlink.decisions.tail_interval import AT_ODDS, DOUBTED, REFUTED, strain
from mwdlink.decisions.tail_words import percent
from mwdlink.errors import Caution
from mwdlink.inversion import joint
from mwdlink.inversion.joint_ensemble import Joint, weight_beyond
from mwdlink.measurement.noise import chi2_in_words

# a nuisance unknown this many prior standard deviations out strains the model
STRAINED = 2.5


def cautions(
    found: Joint, beyond: float, high: float, reach: float, noise_source: str
) -> list[Caution]:
    """What the reader must know before the numbers are used.

    Parameters
    ----------
    beyond, high, reach : float
        Where the tail begins; up to where the sweep follows chains, and feels them [g/mol].
    noise_source : str
        Where the noise of the moduli is known from.
    """
    setting, best, leader = found.setting, found.best, found.kernels[0]
    out = []
    if beyond > reach:
        out.append(
            Caution(
                "beyond_the_sweep",
                f"The sweep does not reach {beyond:.3g} g/mol (it feels chains up to {reach:.3g}): "
                "the weight beyond is assumed, not measured.",
            )
        )
    elif beyond > high:
        out.append(
            Caution(
                "sweep_ends_early",
                f"The sweep follows chains up to {high:.3g} g/mol; longer ones show only as stress "
                "that has not relaxed yet. Lower frequencies would narrow the answer.",
            )
        )
    if setting.gpc.high < beyond * (1 - 1e-6) and setting.gpc.high < 0.8 * beyond:
        out.append(
            Caution(
                "gap_between",
                f"The GPC is used up to {setting.gpc.high:.3g} g/mol only, below where the tail "
                "begins: the weight between rests on the sweep alone.",
            )
        )
    strained = [
        (name, z)
        for name, z in zip(
            joint.NUISANCE,
            (best.nuisance - setting.priors.centre) / setting.priors.spread,
            strict=True,
        )
        if abs(z) > STRAINED
    ]
    doubted = found.beside is not None and found.doubt > DOUBTED
    if strained:
        words = ", ".join(f"{name} by {abs(z):.1f}" for name, z in strained)
        after = (
            "the kernel is the likeliest cause (see kernel_doubted)."
            if doubted
            else "the intervals were widened for it, and the weight beyond counts as assumed."
            if strain(found) > AT_ODDS
            else "the intervals were widened for it."
        )
        out.append(
            Caution(
                "priors_strained",
                f"The pair agrees only by stretching what was thought known ({words} standard "
                "deviations): the kernel, the card or the pairing of the samples is in doubt; "
                f"{after}",
            )
        )
    if doubted and found.beside is not None:
        rival = found.beside
        value = float(weight_beyond(setting.x, rival.best.w, beyond))
        assumed = ", and the value is assumed, not measured" if found.doubt > REFUTED else ""
        out.append(
            Caution(
                "kernel_doubted",
                f"The data speak for the {rival.kernels[0].kernel} kernel "
                f"({100 * found.doubt:.0f} % of the evidence) rather than for what was asked for; "
                f"with it {percent(value)} wt% lie beyond {beyond:.3g} g/mol. The intervals reach "
                f"that far{assumed}. Let all kernels take part.",
            )
        )
    points = leader.free.problem.data.size
    words = chi2_in_words(best.chi2_sweep / points, points, noise_source)
    if best.chi2_sweep / points > 1.5 and words:
        out.append(Caution("poor_fit", words))
    if found.setting.gpc_scale > 1.0:
        out.append(
            Caution(
                "gpc_rough",
                f"The GPC curve is {found.setting.gpc_scale:.1f} times rougher than the error "
                "assumed for it (3 % of itself and 0.3 % of its peak); the error was raised.",
            )
        )
    if found.unsettled > 0.1 * max(found.w.shape[0] + found.unsettled, 1):
        out.append(
            Caution(
                "members_lost",
                f"{found.unsettled} members did not converge and were left out.",
            )
        )
    out.append(
        Caution(
            "column_broadening",
            "Broadening in the GPC columns is not corrected: for narrow distributions it widens "
            "the curve and its continuation.",
        )
    )
    return out
