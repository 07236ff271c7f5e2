"""Study files: what is read, and how a wrong one is refused."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from mwdlink.errors import InputError
from mwdlink.files.study import read_study, read_trust

EXAMPLE = Path(__file__).parents[2] / "examples" / "weighed-bags"


@pytest.fixture
def folder(tmp_path):
    """A private copy of the example."""
    shutil.copytree(EXAMPLE, tmp_path / "bags")
    return tmp_path / "bags"


def edited(folder: Path, old: str, new: str) -> Path:
    path = folder / "study.toml"
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    return path


def test_everything_is_read():
    """Compared with the example's own script: two components, six bags, 190 C."""
    s = read_study(EXAMPLE / "study.toml")
    assert s.polymer.name == "hdpe" and s.temperature_C == 190.0
    assert [c.name for c in s.components] == ["Brook", "Crag"]
    assert all(c.distribution is not None and c.sweep is not None for c in s.components)
    assert [b.name for b in s.blends] == [f"bag-{i}" for i in range(1, 7)]
    assert s.shares(s.blends[0]) == pytest.approx([0.95, 0.05])
    assert s.fraction_uncertainty == 0.002
    assert len(s.paths) == 1 + 4 + 6 and s.paths[0].endswith("study.toml")
    # what the tables do not say of their temperature, the study does
    assert all(b.temperature_C == 190.0 for b in s.blends)


def test_polymer_and_temperature_can_be_given_instead():
    """Compared with the documented precedence: the caller before the file."""
    s = read_study(EXAMPLE / "study.toml", polymer="pp-isotactic", temperature_C=200.0)
    assert s.polymer.name == "pp-isotactic" and s.temperature_C == 200.0
    assert s.components[0].temperature_C == 190.0


def test_a_card_beside_the_study(folder):
    """Compared with the documented meaning of polymer = "card.toml"."""
    from mwdlink.chains.polymer import builtin
    from mwdlink.files.cards import card_text

    (folder / "card.toml").write_text(card_text(builtin("hdpe").to_dict()), encoding="utf-8")
    s = read_study(edited(folder, 'polymer = "hdpe"', 'polymer = "card.toml"'))
    assert s.polymer.name == "hdpe"
    assert any(p.endswith("card.toml") for p in s.paths)


@pytest.mark.parametrize(
    "old, new, said, row",
    [
        ('polymer = "hdpe"', "", "names no polymer", None),
        ("temperature_C = 190", 'temperature_C = "hot"', "no number", 3),
        ("fraction_uncertainty", "fraction_uncertainy", "Did you mean 'fraction_uncertainty'", 4),
        ('sweep = "brook-190.csv"', 'swep = "brook-190.csv"', "Did you mean 'sweep'", 9),
        ('sweep = "brook-190.csv"', 'sweep = "brok-190.csv"', "Did you mean 'brook-190.csv'", 9),
        ('name = "Crag"', 'name = "Brook"', "two components are named", 13),
        ('calibration = "absolute"', 'calibration = "relative"', "unknown calibration", 10),
        ("Brook = 0.95, Crag = 0.05", "Brook = 0.95, Crag = 0.5", "neither 1 nor 100", 20),
        ("Brook = 0.95, Crag = 0.05", "Brook = 0.95, Crack = 0.05", "Did you mean 'Crag'", 20),
        ("Brook = 0.95, Crag = 0.05", "Brook = -0.5, Crag = 1.5", "no share", 20),
        ("[[component]]", "[component]", "", None),
        ("[[component]]", "[[component", "no TOML", None),
    ],
)
def test_what_is_wrong_is_said_with_its_line(folder, old, new, said, row):
    """Compared with the promise that errors name file, line and remedy."""
    with pytest.raises(InputError) as caught:
        read_study(edited(folder, old, new))
    assert said in str(caught.value)
    assert str(caught.value.path).endswith("study.toml")
    if row is not None:
        assert caught.value.row == row


def test_paths_stay_within_the_folder(folder):
    """Compared with the documented rule, links included; --outside allows it."""
    outside = folder.parent / "elsewhere.csv"
    shutil.copy(folder / "brook-190.csv", outside)
    path = edited(folder, 'sweep = "brook-190.csv"', 'sweep = "../elsewhere.csv"')
    with pytest.raises(InputError, match="leads out of"):
        read_study(path)
    assert read_study(path, outside=True).components[0].sweep is not None
    (folder / "link.csv").symlink_to(outside)
    with pytest.raises(InputError, match="leads out of"):
        read_study(edited(folder, "../elsewhere.csv", "link.csv"))
    with pytest.raises(InputError, match="leads out of"):
        read_study(edited(folder, "link.csv", str(outside)))


def test_a_missing_study_and_no_trust_file(tmp_path):
    """Compared with the documented refusals."""
    with pytest.raises(InputError, match="no such file"):
        read_study(tmp_path / "none.toml")
    path = tmp_path / "trust.toml"
    path.write_text('kind = "other"\n', encoding="utf-8")
    with pytest.raises(InputError, match="no trust file"):
        read_trust(path)


def test_percent_and_a_pure_component(folder):
    """Compared with the contract: fractions sum to 1 or 100; one component may be all."""
    s = read_study(edited(folder, "Brook = 0.95, Crag = 0.05", "Brook = 100"))
    assert s.shares(s.blends[0]) == pytest.approx([1.0, 0.0])
