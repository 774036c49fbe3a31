from __future__ import annotations

import pandas as pd
import pytest

from poroscan.batch.ledger_entry import batch_digest, ledger_batch
from poroscan.batch.summary import AVERAGED

ABOUT = {"version": "1", "recipe_sha256": "r"}
LINES = [{"batch": "b", "image": f"{n}.png", "sha256": n * 64, "folder": f"images/{n}"} for n in "ab"]
ENTRIES = [{"key": "k1"}, {"key": "k2"}]


def test_the_digest_follows_from_version_recipe_and_pictures_alone() -> None:
    digest = batch_digest(ABOUT, LINES, ENTRIES)
    assert batch_digest(ABOUT | {"state": "finished", "recipe": {"qc": {}}}, LINES[::-1], ENTRIES[::-1]) == digest
    changed = [
        batch_digest(ABOUT | {"version": "2"}, LINES, ENTRIES),
        batch_digest(ABOUT | {"recipe_sha256": "s"}, LINES, ENTRIES),
        batch_digest(ABOUT, LINES, [{"key": "k1"}, {"key": "k3"}]),  # a mask or sidecar row changed
        batch_digest(ABOUT, LINES[:1], ENTRIES[:1]),
    ]
    assert len({digest, *changed}) == 5


def _rows() -> pd.DataFrame:
    rows = pd.DataFrame({q.key: [0.4, 0.5, 0.9] for q in AVERAGED})
    return rows.assign(
        batch="b", image=["a", "b", "b"], particle=["1", "1", "2"], view="whole", touches_frame=[False, False, True],
        frame_weight=1.0,
    )  # fmt: skip


@pytest.mark.parametrize(
    ("sidecars", "expected"),
    [
        ([{}, {}], (None, None, None)),
        ([{"instrument": "east", "date": "2026-03-02"}, {"instrument": "east", "date": "2026-03-01"}], ("2026-03-01", "east", None)),
        ([{"operator": "late"}, {"operator": "early"}], (None, None, "early + late")),
        ([{"measured_on": "2. March", "date": "2026-03-01"}, {}], (None, None, None)),
    ],
)  # fmt: skip
def test_day_instrument_and_operator_come_from_the_sidecar(
    sidecars: list[dict[str, str]], expected: tuple[str | None, ...]
) -> None:
    batch = ledger_batch("b", _rows(), [{"sidecar": row} for row in sidecars])
    assert (batch.measured_on, batch.instrument, batch.operator) == expected
    assert (batch.particles, batch.images) == (2, 2)  # the cut particle does not count
    assert batch.estimates["porosity"].value == pytest.approx(0.45)
