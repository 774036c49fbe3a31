from __future__ import annotations

import json
from pathlib import Path

from poroscan.report.look_alikes import MOST, look_alikes
from poroscan.report.source import RunData


def _run(path: Path, matches: list[object]) -> RunData:
    folder = path / "images" / "p"
    folder.mkdir(parents=True)
    rows = [{"particle": str(n)} for n in range(1, len(matches) + 1)]
    (folder / "image.json").write_text(json.dumps({"rows": rows, "matches": matches}))
    (folder / "particle-1-like-1.webp").write_bytes(b"x")
    line = {"batch": "b", "image": "p.tif", "folder": "images/p"}
    return RunData(path, {"inputs": [line]}, (), (), ())


def _near(run: str, distance: float) -> dict[str, object]:
    return {"run": run, "regime": "spinodal", "distance": distance, "parameters": {}}


def test_what_most_particles_name_comes_first(tmp_path: Path) -> None:
    matches = [
        {"nearest": [_near("r1", 0.2), _near("r2", 0.3)]},
        {"nearest": [_near("r2", 0.4), _near("r3", 0.5)]},
        None,
    ]
    data = _run(tmp_path, matches)
    found = look_alikes([("b", "p.tif", str(n)) for n in (1, 2, 3)], data)
    assert [f["words"].split(", ")[-1] for f in found] == ["distance 0.30", "distance 0.20", "distance 0.50"]
    assert "among the nearest of 2 of 3 particles" in found[0]["words"]
    assert found[0]["words"].startswith("Instantaneous demixing, both phases continuous: ")
    assert [f["picture"] for f in found] == ["", "images/p/particle-1-like-1.webp", ""]


def test_none_without_an_atlas_and_few_with_one(tmp_path: Path) -> None:
    assert look_alikes([("b", "p.tif", "1")], _run(tmp_path / "a", [None])) == []
    many = [{"nearest": [_near(f"r{n}-{k}", 0.1) for k in range(3)]} for n in range(5)]
    data = _run(tmp_path / "b", many)
    assert len(look_alikes([("b", "p.tif", str(n)) for n in range(1, 6)], data)) == MOST
