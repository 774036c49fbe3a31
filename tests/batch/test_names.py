from __future__ import annotations

import re

import pytest

from poroscan.batch.names import folder_name, spreadsheet_safe

HOSTILE = [
    "a b.tif",
    "a_b.tif",
    "a.tif",
    "A.tif",
    "a.TIF",
    "a.png",
    "=1+1.tif",
    "<script>alert(1)</script>.tif",
    "\"quote'.tif",
    "..",
    "...",
    "con.tif",
    "CON.tif",
    "é.tif",
    "e\u0301.tif",
    "日本.tif",
    "语.tif",
    "x" * 250 + "1.tif",
    "x" * 250 + "2.tif",
    "a__b.tif",
    "back\\slash.tif",
    "new\\nline.tif",
    "-rf.tif",
    " .tif",
]


def test_hostile_names_become_plain_and_stay_apart() -> None:
    names = [folder_name(batch, image) for batch in ("", "b", "B", "a", "x/y", "x_y") for image in HOSTILE]
    assert all(re.fullmatch(r"[a-z0-9][a-z0-9._-]*", n) and len(n) < 120 for n in names)
    assert len({n.casefold() for n in names}) == len(names)


def test_plain_names_stay_as_they_are() -> None:
    assert folder_name("lot_1", "bead_01.tif") == "lot_1__bead_01.tif"


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r", "\n", "＝"])
def test_formulas_are_neutralised(start: str) -> None:
    assert spreadsheet_safe(f"{start}1") == f"'{start}1"
    assert spreadsheet_safe(f"a{start}1") == f"a{start}1"
