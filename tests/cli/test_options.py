"""What can be typed as an option's value, and what is refused with status 2."""

from __future__ import annotations

from typing import Any

import click
import numpy as np
import pytest

from mwdlink.cli import options


def test_values() -> None:
    """Interface: forms of the common options."""
    assert options.Exponent().convert("2.1", None, None) == 2.1
    assert [options.Members().convert(n, None, None) for n in ("0", "20")] == [0, 20]
    assert options.Exponent().convert("1.8:2.3", None, None) == (1.8, 2.3)
    assert options.Rows().convert("3,17-19", None, None) == {3, 17, 18, 19}
    assert options.Pair().convert("lot = 7=8", None, None) == ("lot", "7=8")
    assert options.Frequencies().convert("1e-2:1e2:5", None, None) == (0.01, 100.0, 5)
    assert options.Number("R", 0, 1, percent=True).convert("3%", None, None) == pytest.approx(0.03)


@pytest.mark.parametrize(
    ("kind", "text"),
    [
        (options.Exponent(), "0.5"),
        (options.Exponent(), "2:1"),
        (options.Exponent(), "1:2:3"),
        (options.Exponent(), "nan"),
        (options.Rows(), "0"),
        (options.Rows(), "5-3"),
        (options.Rows(), "a"),
        (options.Pair(), "lot"),
        (options.Frequencies(), "1:2"),
        (options.Frequencies(), "0:1:10"),
        (options.Frequencies(), "1e3:1:10"),
        (options.Number("R", 0, 1), "0"),
        (options.Number("R", 0, 1), "inf"),
        (options.TEMPERATURE, "-300"),
        (options.Members(), "5"),
        (options.Members(), "-1"),
    ],
)
def test_refused(kind: Any, text: str) -> None:
    """Common practice: a slip is a usage error, said before anything is computed."""
    with pytest.raises(click.UsageError) as caught:
        kind.convert(text, None, None)
    assert caught.value.exit_code == 2


def test_frequencies_default_count() -> None:
    """Derived: 1e-4 to 1e4 at 10 a decade is 81 points with both ends."""
    omega = options.frequencies((1e-4, 1e4, 10))
    assert omega.shape == (81,)
    assert np.allclose(omega[[0, -1]], [1e-4, 1e4])
    assert options.frequencies(None) is None


def test_kernel_names_agree() -> None:
    """The command line offers what the registry has, without importing it."""
    from mwdlink.relaxation.kernels import KERNEL_NAMES

    assert set(options.KERNELS) == set(KERNEL_NAMES)


def test_card_names_agree() -> None:
    """The names completed by the shell are those that the cards have."""
    from mwdlink.chains.polymer import builtin, builtin_names

    assert options.card_names() == list(builtin_names())
    assert all(builtin(name).name == name for name in builtin_names())
