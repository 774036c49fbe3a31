from __future__ import annotations

import copy
import re
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import pytest

from poroscan.demix.formulation import Composition, Formulation, formulation_from_table, load_formulation
from poroscan.demix.interaction import SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture
from poroscan.demix.settings_table import check_keys, read_settings
from poroscan.errors import InputError, SettingsError

TABLE: dict[str, Any] = {
    "name": "trial 7",
    "polymer": {"name": "polysulfone", "chain_length": 100},
    "solvent": {"name": "NMP", "chain_length": 1},
    "nonsolvent": {"name": "water", "chain_length": 1},
    "interactions": {"convention": "per_site", "chi_pn": 2.7, "chi_ps": 0.24, "chi_sn": 1},
    "dope": {"polymer": 0.15, "solvent": 0.85},
    "bath": {"nonsolvent": 1.0},
}
MOLAR: dict[str, Any] = {
    **TABLE,
    "polymer": {"molar_volume_cm3": 18000.0},
    "solvent": {"molar_volume_cm3": 72.0},
    "nonsolvent": {"molar_volume_cm3": 18.0},
    "interactions": {
        "convention": "molar",
        "chi_13": 1.4,
        "chi_23": 0.45,
        "g_12": {"rational": [0.661, 0.417, 0.755]},
    },
}
EXAMPLE = Path(__file__).parents[2] / "docs" / "formulation.md"


def changed(table: dict[str, Any], path: str, value: Any) -> dict[str, Any]:
    """Copy of a table with one value set, or removed where the value is None."""
    table = copy.deepcopy(table)
    *parents, last = path.split(".")
    here = table
    for parent in parents:
        here = here.setdefault(parent, {})
    if value is None:
        del here[last]
    else:
        here[last] = value
    return table


def test_per_site() -> None:
    formulation = formulation_from_table(TABLE)
    assert formulation.mixture == Mixture(N_p=100.0, N_s=1.0, N_n=1.0, chi_pn=2.7, chi_ps=0.24, chi_sn=1.0)
    assert formulation.dope == Composition(polymer=0.15, solvent=0.85)
    assert (formulation.bath.phi_n, formulation.bath.phi_p) == (1.0, 0.0)
    assert formulation.name == "trial 7"


def test_molar() -> None:
    formulation = formulation_from_table(MOLAR)
    expected = Mixture(
        N_p=1000.0, N_s=4.0, N_n=1.0, chi_pn=1.4, chi_ps=0.1125, chi_sn=ShareRational(0.661, 0.417, 0.755)
    )
    assert formulation.mixture == expected


def test_per_site_with_molar_volumes_takes_the_nonsolvent_as_the_site() -> None:
    table = changed(MOLAR, "interactions", TABLE["interactions"])
    assert formulation_from_table(table).mixture.sizes.tolist() == [1.0, 4.0, 1000.0]


def test_simulation_table_fills_the_settings() -> None:
    table = changed(TABLE, "simulation", {"cells": 300, "snapshots": [0.1, 0.2], "viscosity": 3})
    settings = formulation_from_table(table).simulation
    assert (settings.cells, settings.snapshots, settings.viscosity) == (300, (0.1, 0.2), 3.0)


def test_a_formulation_without_a_name_is_called_by_its_components() -> None:
    assert formulation_from_table(changed(TABLE, "name", None)).name == "polysulfone / NMP / water"


BAD = [
    ("dope.solvent", 0.9, r"\[dope\]: the volume fractions add up to 1.05, not 1"),
    ("dope.polymer", -0.15, r"\[dope\]: polymer must be a volume fraction between 0 and 1, got -0.15"),
    ("bath.nonsolvent", float("nan"), r"\[bath\]: nonsolvent must be a volume fraction"),
    ("dope", {"solvent": 1.0}, r"dope lies on a corner of the composition triangle"),
    ("dope", {"polymer": 1.0}, r"dope lies on a corner of the composition triangle"),
    ("bath", {"polymer": 0.15, "solvent": 0.85}, r"dope and bath have the same composition"),
    ("bath", {"polymer": 0.2, "nonsolvent": 0.8}, r"bath holds as much polymer \(0.2\) as the dope \(0.15\)"),
    ("bath", None, r"the table \[bath\] is missing"),
    ("polymer.chain_length", 0.5, r"\[polymer\]: chain_length must be at least 1, got 0.5"),
    ("polymer.chain_length", "long", r"\[polymer\]: chain_length must be a number, got 'long'"),
    ("polymer.chain_length", None, r"\[polymer\]: give either chain_length .* or molar_volume_cm3"),
    ("solvent.molar_volume_cm3", 96.5, r"\[solvent\]: give either"),
    ("polymer.chain_lenght", 5, r"unknown key 'chain_lenght'; did you mean 'chain_length'\?"),
    ("nonsolvant", {}, r"unknown key 'nonsolvant'; did you mean 'nonsolvent'\?"),
    ("dope.polimer", 0.1, r"\[dope\]: unknown key 'polimer'; did you mean 'polymer'\?"),
    ("zzz", 1, r"unknown key 'zzz'; known are name, polymer"),
    ("interactions.convention", "flory", r"convention must be one of per_site, molar, got 'flory'"),
    ("interactions.convention", None, r"convention must be one of per_site, molar, got None"),
    ("interactions.convention", "molar", r"'chi_pn' belongs to the convention 'per_site', but convention = 'molar'"),
    ("interactions.chi_13", 2.0, r"'chi_13' belongs to the convention 'molar'"),
    ("interactions.chi_sn", None, r"\[interactions\]: 'chi_sn' is missing"),
    ("interactions.chi_sn", float("nan"), r"\[interactions\]: chi_sn must be finite, got nan"),
    ("interactions.chi_sn", "low", r"chi_sn must be a number, .*polynomial.*rational.*, got 'low'"),
    ("interactions.chi_sn", {"rational": [1.0, 2.0]}, r"rational takes three numbers a, b, c"),
    ("interactions.chi_sn", {"rational": [1.0, 2.0, 1.5]}, r"c below 1"),
    ("interactions.chi_sn", {"spline": [1.0]}, r"unknown key 'spline'; known are polynomial, rational"),
    ("simulation", 3, r"simulation must be a table"),
    ("simulation", {"radios": 80}, r"\[simulation\]: unknown key 'radios'; did you mean 'radius'\?"),
    ("simulation", {"radius": 1000}, r"\[simulation\]: radius must leave bath around the drop"),
    ("simulation", {"cells": 30.5}, r"\[simulation\]: cells must be a whole number, got 30.5"),
    ("simulation", {"dimensions": 4}, r"\[simulation\]: dimensions must be one of 2, 3, got 4"),
    ("simulation", {"snapshots": 0.5}, r"\[simulation\]: snapshots must be a list, got 0.5"),
    ("name", 7, r"name must be a text in quotes, got 7"),
]


@pytest.mark.parametrize(("path", "value", "words"), BAD, ids=[f"{path}={value}"[:40] for path, value, _ in BAD])
def test_what_is_wrong_is_named(path: str, value: Any, words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        formulation_from_table(changed(TABLE, path, value))


def test_molar_convention_needs_all_volumes() -> None:
    with pytest.raises(SettingsError, match="needs molar_volume_cm3 of all three components"):
        formulation_from_table(changed(MOLAR, "polymer", {"chain_length": 100}))


def test_fingerprint_changes_with_the_physics_and_not_with_the_names() -> None:
    plain = formulation_from_table(TABLE).fingerprint()
    assert formulation_from_table(changed(TABLE, "name", "another")).fingerprint() == plain
    others = [
        ("interactions.chi_sn", 1.01),
        ("simulation", {"cells": 300}),
        ("bath", {"nonsolvent": 0.9, "solvent": 0.1}),
    ]
    prints = {formulation_from_table(changed(TABLE, path, value)).fingerprint() for path, value in others}
    assert len(prints | {plain}) == 4
    share = formulation_from_table(changed(TABLE, "interactions.chi_sn", {"polynomial": [1.0, 0.5]})).fingerprint()
    assert (
        share != formulation_from_table(changed(TABLE, "interactions.chi_sn", {"polynomial": [1.0, 0.6]})).fingerprint()
    )


def test_files(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot be read"):
        load_formulation(tmp_path / "none.toml")
    broken = tmp_path / "broken.toml"
    broken.write_text("[polymer\n", encoding="utf-8")
    with pytest.raises(InputError, match="is not a TOML file"):
        load_formulation(broken)
    broken.write_bytes(b'name = "\xff"')
    with pytest.raises(InputError, match="is not a TOML file"):
        load_formulation(broken)
    broken.write_text("name = 'x'\n", encoding="utf-8")
    with pytest.raises(SettingsError, match=r"broken.toml: formulation: the table \[polymer\] is missing"):
        load_formulation(broken)


def test_the_examples_of_the_documentation_are_formulations() -> None:
    blocks = re.findall(r"```toml\n(.*?)```", EXAMPLE.read_text(encoding="utf-8"), flags=re.DOTALL)
    assert len(blocks) >= 2
    for block in blocks:
        assert isinstance(formulation_from_table(tomllib.loads(block)), Formulation)


@dataclass(frozen=True)
class _Settings:
    size: float = 1.0
    count: int = 1
    on: bool = False
    kind: Literal["a", "b"] = "a"
    many: tuple[float, ...] = ()
    maybe: float | None = None
    label: str = ""


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({"size": True}, "size must be a number, got True"),
        ({"count": True}, "count must be a whole number, got True"),
        ({"on": 1}, "on must be true or false, got 1"),
        ({"kind": "c"}, "kind must be one of 'a', 'b', got 'c'"),
        ({"many": ["x"]}, "many must be a number, got 'x'"),
        ({"maybe": "x"}, "maybe must be a number, got 'x'"),
        ({"label": 3}, "label must be a text in quotes, got 3"),
    ],
)
def test_kinds_of_values(table: dict[str, Any], words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        read_settings(_Settings, table, where="[x]")


def test_values_are_converted() -> None:
    table = {"size": 2, "count": 3, "on": True, "kind": "b", "many": [1, 2.5], "maybe": 4, "label": "x"}
    assert read_settings(_Settings, table, where="[x]") == _Settings(2.0, 3, True, "b", (1.0, 2.5), 4.0, "x")


def test_a_swapped_letter_is_told_from_a_wrong_one() -> None:
    """chi_np is as near to chi_sn as to chi_pn by edits, but has the letters of chi_pn."""
    with pytest.raises(SettingsError, match="unknown key 'chi_np'; did you mean 'chi_pn'"):
        check_keys({"chi_np": 1.0}, ["chi_sn", "chi_ps", "chi_pn"], where="[interactions]")


def test_parameters_in_words() -> None:
    assert str(ShareRational(0.661, 0.417, 0.755)) == "0.661 + 0.417/(1 − 0.755 u)"
    assert str(ShareRational(0.5, -0.25, -0.5, scale=2.0)) == "2 (0.5 − 0.25/(1 + 0.5 u))"
    assert str(SharePolynomial((0.5, 0.04, 0.8, -1.2))) == "0.5 + 0.04 u + 0.8 u^2 − 1.2 u^3"
    assert str(SharePolynomial((-0.5,))) == "−0.5"
