"""Which inputs a batch has, in which order and under which names."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from mwdlink.errors import InputError
from mwdlink.runs.lots import find_lots, is_manifest, shown


def touch(folder: Path, *names: str) -> None:
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text("omega [rad/s],G' [Pa],G'' [Pa]\n")


def test_order_of_a_folder(tmp_path: Path) -> None:
    """Common practice of file managers: lot 2 before lot 10; what is no table is passed over."""
    touch(tmp_path, "lot 10.csv", "lot 2.csv", "b/x.txt", "notes.pdf", ".hidden.csv", "a.tsv")
    lots, notes = find_lots([tmp_path])
    assert [lot.lot for lot in lots] == ["a", "x", "lot 2", "lot 10"]
    assert not notes


def test_links_in_a_circle_end(tmp_path: Path) -> None:
    """A folder that links to its parent is looked into once; a link to itself is an input lost."""
    touch(tmp_path, "a.csv")
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub" / "up").symlink_to(tmp_path)
    (tmp_path / "loop.csv").symlink_to("loop.csv")
    lots, _ = find_lots([tmp_path])
    assert [lot.lot for lot in lots] == ["a", "loop"]


def test_named_twice_counts_once(tmp_path: Path) -> None:
    """A file given by name, by folder and by pattern is one lot, said."""
    touch(tmp_path, "a.csv", "b.csv")
    lots, notes = find_lots([tmp_path / "b.csv", tmp_path, str(tmp_path / "*.csv")])
    assert [lot.lot for lot in lots] == ["b", "a"]
    assert [n.code for n in notes] == ["named_twice"]


def test_results_are_no_inputs(tmp_path: Path) -> None:
    """The folder results go to, and any folder with a result, may lie within the inputs."""
    touch(tmp_path, "a.csv", "out/fit.csv", "old/summary.csv", "old/result.json")
    lots, notes = find_lots([tmp_path], leave_out=[tmp_path / "out"])
    assert [lot.lot for lot in lots] == ["a"]
    assert [n.code for n in notes] == ["result_left_aside"]


@pytest.mark.parametrize(
    "name",
    [
        "=cmd|'x'!A1",
        "-dash",
        "a b",
        "new\nline",
        "<b>&",
        "../up",
        "CON",
        "x" * 200,
        "é",
        "..",
        "=1",
    ],
)
def test_folder_names_are_safe(name: str) -> None:
    """Names that a shell, a spreadsheet or another system would trip over become plain ones."""
    lots, _ = find_lots([name + ".csv"])
    made = lots[0].name
    assert made and not set(made) - set(
        "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789._-"
    )
    assert made[0] not in "-._=" and len(made) < 80 and made.upper() != "CON"
    assert lots[0].reason


def test_folder_names_are_unique(tmp_path: Path) -> None:
    """Two lots that would share a folder (also where case does not count) get two."""
    touch(tmp_path, "p/lot.csv", "q/LOT.csv", "q/l ot.csv", "q/l_ot.csv", "figures.csv")
    lots, _ = find_lots([tmp_path])
    names = [lot.name.casefold() for lot in lots]
    assert len(set(names)) == len(names) == 5
    assert "figures" not in names
    again, _ = find_lots([tmp_path])
    assert [lot.name for lot in again] == [lot.name for lot in lots]


def test_text_that_is_none() -> None:
    """Bytes that are no text and control characters are shown as escapes."""
    assert shown("a\nb\x1b[31m") == "a\\nb\\x1b[31m"
    assert shown(os.fsdecode(b"raw\xff")).encode("utf-8")


MANIFEST = """\
# made up
path;polymer;temperature [K];lot
a.csv;hdpe;463.15;first
sub/b.csv;;;second
../out.csv;hdpe;463.15;third
gone.csv;hdpe;463.15;fourth
a.csv;../card.toml;463.15;fifth
a.csv;hdpe;warm;sixth
/etc/hostname;hdpe;463.15;seventh
;;;
"""


def manifest(folder: Path) -> Path:
    touch(folder, "home/a.csv", "home/sub/b.csv", "out.csv", "card.toml")
    path = folder / "home" / "list.csv"
    path.write_text(MANIFEST)
    return path


def test_manifest(tmp_path: Path) -> None:
    """Columns by name, kelvin made Celsius, paths relative to the manifest; rows stay in order."""
    path = manifest(tmp_path)
    assert is_manifest(str(path)) and not is_manifest(str(tmp_path / "home" / "a.csv"))
    lots, _ = find_lots([path])
    assert [lot.lot for lot in lots] == [
        "first", "second", "third", "fourth", "fifth", "sixth", "seventh",
    ]  # fmt: skip
    assert lots[0].temperature_C == pytest.approx(190.0) and lots[0].polymer == "hdpe"
    assert lots[1].reason is None and lots[1].polymer is None and lots[1].temperature_C is None
    for i in (2, 4, 6):
        assert "leads out of the manifest's folder" in str(lots[i].reason)
    assert "no such file" in str(lots[3].reason)
    assert "'warm' is no number" in str(lots[5].reason)


def test_manifest_may_be_allowed_to_lead_out(tmp_path: Path) -> None:
    """The user's word lets a manifest name files elsewhere; a link does not do it by the way."""
    path = manifest(tmp_path)
    lots, _ = find_lots([path], anywhere=True)
    assert lots[2].reason is None and lots[4].reason is None
    (tmp_path / "home" / "link.csv").symlink_to("../out.csv")
    path.write_text("file,lot\nlink.csv,x\n")
    assert "leads out" in str(find_lots([path])[0][0].reason)


def test_nothing_found(tmp_path: Path) -> None:
    """An empty folder, a pattern without matches and a manifest's unknown unit are errors."""
    with pytest.raises(InputError, match="no input was found"):
        find_lots([tmp_path])
    with pytest.raises(InputError, match="nothing matches"):
        find_lots([str(tmp_path / "*.csv")])
    (tmp_path / "m.csv").write_text("path,temperature [F]\na.csv,374\n")
    with pytest.raises(InputError, match="unit 'f' is not known"):
        find_lots([tmp_path / "m.csv"])
