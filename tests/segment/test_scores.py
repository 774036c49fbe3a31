"""Agreement with drawn masks: hand-counted cases, and the command."""

from __future__ import annotations

import json
import math
from pathlib import Path

import drawn_scenes as scenes
import numpy as np
import pytest
import tifffile
from skimage.io import imsave

from poroscan.cli.app import main
from poroscan.segment.scoring import agreement, boundary_distance, dice, median_pore_size, score_masks
from poroscan.segment.truth import read_mask


def test_dice_by_hand() -> None:
    a = np.array([[1, 1, 0, 0]], bool)
    b = np.array([[0, 1, 1, 1]], bool)
    assert dice(a, b) == pytest.approx(2 * 1 / 5)
    assert dice(a, a) == 1.0
    assert dice(~a & a, ~a & a) == 1.0


def test_boundary_distance_of_concentric_discs() -> None:
    first, second = scenes.disc(100, 100, 60, (200, 200)), scenes.disc(100, 100, 50, (200, 200))
    assert boundary_distance(first, second) == pytest.approx(10, abs=0.4)
    assert boundary_distance(first, first) == 0.0
    assert math.isnan(boundary_distance(first, np.zeros_like(first)))


def test_median_pore_size() -> None:
    pores = np.zeros((40, 40), bool)
    pores[2:6, 2:6] = True  # 16
    pores[10:20, 10:20] = True  # 100: holds the median pore pixel
    assert median_pore_size(pores) == pytest.approx(2 * math.sqrt(100 / math.pi))
    assert math.isnan(median_pore_size(np.zeros((4, 4), bool)))


def test_agreement_of_published_formula() -> None:
    """Bias and limits by the formulas of Bland and Altman (1986) on numbers worked by hand: d = 1, 2, 3, 6."""
    found = agreement([1.0, 2.0, 3.0, 6.0, math.nan])
    sd = math.sqrt((4 + 1 + 0 + 9) / 3)
    assert found.count == 4
    assert (found.bias, found.sd) == pytest.approx((3.0, sd))
    assert (found.low, found.high) == pytest.approx((3 - 1.96 * sd, 3 + 1.96 * sd))
    assert (found.bias_error, found.limit_error) == pytest.approx((sd / 2, math.sqrt(3 / 4) * sd))
    assert math.isnan(agreement([0.1]).sd)
    assert agreement([]).count == 0


def test_score_checks_shapes() -> None:
    with pytest.raises(ValueError, match=r"drawn_pores must have the shape of pores \(4, 4\), not \(5, 4\)"):
        score_masks(pores=np.zeros((4, 4), bool), drawn_pores=np.zeros((5, 4), bool))


@pytest.fixture
def folders(tmp_path: Path) -> tuple[Path, Path]:
    particle = scenes.disc(60, 60, 50, (120, 120))
    pores = scenes.lattice_pores(particle)
    run, truth = tmp_path / "run", tmp_path / "truth"
    (run / "images" / "a.tif").mkdir(parents=True)
    truth.mkdir()
    planes = np.stack([particle, pores]).astype(np.uint16)
    tifffile.imwrite(run / "images" / "a.tif" / "labels.ome.tif", planes, photometric="minisblack")
    imsave(truth / "a_pores.png", (pores * 255).astype(np.uint8), check_contrast=False)
    imsave(truth / "a_particles.png", (particle * 255).astype(np.uint8), check_contrast=False)
    return run, truth


def test_score_command(folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    run, truth = folders
    assert main(["score", str(run), str(truth), "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    (row,) = data["pictures"]
    assert row["image"] == "a.tif"
    assert row["pore_dice"] == row["particle_dice"] == 1.0
    assert row["porosity_bias"] == 0.0
    assert data["agreement"]["porosity"]["bias"] == 0.0
    assert data["agreement"]["porosity"]["sd"] is None
    assert main(["score", str(run), str(truth)]) == 0
    out = capsys.readouterr()
    assert "limits of agreement" in out.out
    assert "coarse" in out.err


def test_score_command_with_folder_of_masks(folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    _, truth = folders
    assert main(["score", str(truth), str(truth), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["pictures"][0]["pore_dice"] == 1.0


def test_score_command_names_what_is_wrong(folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    run, truth = folders
    assert main(["score", str(run), str(truth / "none")]) == 3
    assert "no such folder" in capsys.readouterr().err
    (truth / "a_pores.png").write_bytes(b"no picture")
    assert main(["score", str(run), str(truth)]) == 3
    assert "a_pores.png" in capsys.readouterr().err
    (truth / "a_pores.png").unlink()
    assert main(["score", str(run), str(truth)]) == 3
    assert "name drawn masks after the pictures" in capsys.readouterr().err


def test_score_of_a_run_finds_masks_by_batch(folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """A run names the folder of each picture itself; two batches hold a picture of the same name, one of them drawn."""
    run, truth = folders
    labels = (run / "images" / "a.tif" / "labels.ome.tif").read_bytes()
    inputs = []
    for batch in ("lot 1", "lot 2"):
        inner = run / "images" / f"{batch}__a"
        inner.mkdir()
        (inner / "labels.ome.tif").write_bytes(labels)
        inputs.append({"batch": batch, "image": "a.tif", "folder": f"images/{batch}__a", "outcome": "measured"})
    (run / "run.json").write_text(json.dumps({"inputs": inputs}), encoding="utf-8")
    (truth / "lot 2").mkdir()
    (truth / "a_pores.png").rename(truth / "lot 2" / "a_pores.png")
    assert main(["score", str(run), str(truth), "--json"]) == 0
    (row,) = json.loads(capsys.readouterr().out)["pictures"]
    assert row["image"] == "lot 2/a.tif"
    assert row["pore_dice"] == 1.0
    (truth / "lot 2" / "a_pores.png").rename(truth / "a_pores.png")  # for which of the two?
    assert main(["score", str(run), str(truth)]) == 3
    assert "name drawn masks after the pictures" in capsys.readouterr().err
    (run / "run.json").write_text("{}", encoding="utf-8")
    assert main(["score", str(run), str(truth)]) == 3
    assert "run.json: is no record of a run" in capsys.readouterr().err


def test_masks_drawn_on_the_whole_picture(folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """20 rows of banner below: a mask that covers them is cut, one of any other height is refused."""
    run, truth = folders
    (run / "images" / "a.tif" / "image.json").write_text('{"banner_rows": 20}', encoding="utf-8")
    short = (truth / "a_pores.png").read_bytes()
    for more, code in ((20, 0), (21, 3)):
        (truth / "a_pores.png").write_bytes(short)
        pores = read_mask(truth / "a_pores.png")
        tall = np.vstack([pores, np.ones((more, pores.shape[1]), bool)])
        imsave(truth / "a_pores.png", (tall * 255).astype(np.uint8), check_contrast=False)
        assert main(["score", str(run), str(truth), "--json"]) == code
    said = capsys.readouterr()
    assert json.loads(said.out)["pictures"][0]["pore_dice"] == 1.0
    assert "a.tif: drawn_pores must have the shape of pores (120, 120), not (141, 120)" in said.err
