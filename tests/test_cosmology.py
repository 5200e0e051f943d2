"""The cosmology: what a user may ask for, and what is refused."""

from __future__ import annotations

import re
import subprocess
import sys

import numpy as np
import pytest

from hurstfit.cosmology import cosmology_from
from hurstfit.errors import HurstfitError

WHERE = "demo.toml, [clock] cosmology"
NEUTRINOS = {"H0": 67.0, "Om0": 0.31, "Ode0": 0.75, "Tcmb0": 2.7255, "Neff": 3.04, "m_nu": [0.0, 0.0, 0.06]}


@pytest.mark.parametrize(
    ("table", "kind"),
    [
        ({"H0": 70, "Om0": 0.3}, "FlatLambdaCDM"),
        ({"H0": 70, "Om0": 0.3, "Ode0": 0.8}, "LambdaCDM"),
        ({"H0": 70, "Om0": 0.3, "w0": -0.9}, "FlatwCDM"),
        ({"H0": 70, "Om0": 0.3, "Ode0": 0.8, "w0": -0.9}, "wCDM"),
        ({"H0": 70, "Om0": 0.3, "wa": 0.2}, "Flatw0waCDM"),
        ({"H0": 70, "Om0": 0.3, "Ode0": 0.8, "w0": -0.9, "wa": 0.2}, "w0waCDM"),
        (NEUTRINOS, "LambdaCDM"),
    ],
)
def test_a_table_makes_the_model_that_its_keys_call_for(table: dict[str, object], kind: str) -> None:
    model = cosmology_from(table, where=WHERE)
    assert type(model).__name__ == kind
    for key in table.keys() - {"m_nu"}:
        value = getattr(model, key)
        assert float(getattr(value, "value", value)) == table[key]
    if "m_nu" in table:
        np.testing.assert_array_equal(model.m_nu.to_value("eV"), table["m_nu"])


def test_a_model_without_a_beginning_is_refused() -> None:
    from astropy.cosmology import LambdaCDM

    with pytest.raises(HurstfitError, match=f"{re.escape(WHERE)}: this model has no beginning of time"):
        cosmology_from(LambdaCDM(70.0, 0.0, 1.0), where=WHERE)


def test_a_model_made_with_astropy_is_taken_as_it_is() -> None:
    from astropy.cosmology import WMAP9

    assert cosmology_from(WMAP9, where=WHERE) is WMAP9
    assert cosmology_from("WMAP9", where=WHERE) is WMAP9


@pytest.mark.parametrize(
    ("spec", "sentence"),
    [
        ("Plank18", r"'Plank18' is not a known model \(did you mean 'Planck18'\?\)"),
        (70.0, "found 70.0 in place of"),
        ({"H0": 70}, "Om0 is missing"),
        ({"Om0": 0.3}, "H0 is missing"),
        ({"H0": 70, "om0": 0.3}, r"'om0' is not a parameter of a model \(did you mean 'Om0'\?\)"),
        ({"H0": "70", "Om0": 0.3}, "H0 = '70', but it must be a number from 10 to 500 km/s/Mpc"),
        ({"H0": 0.7, "Om0": 0.3}, "H0 = 0.7, but"),
        ({"H0": -70, "Om0": 0.3}, "H0 = -70, but"),
        ({"H0": 70, "Om0": 0.0}, "Om0 = 0.0, but it must be a number above 0"),
        ({"H0": 70, "Om0": True}, "Om0 = True, but"),
        ({"H0": 70, "Om0": 0.3, "w0": float("nan")}, "w0 = nan, but it must be a finite number"),
        ({"H0": 70, "Om0": 0.3, "Tcmb0": -2.7}, "Tcmb0 = -2.7, but it must be a number of at least 0 K"),
        ({"H0": 70, "Om0": 0.3, "m_nu": 0.06}, "m_nu has no effect without Tcmb0"),
        ({"H0": 70, "Om0": 0.3, "Tcmb0": 2.7, "m_nu": [0.0, 0.06]}, "m_nu holds 2 masses, but Neff = 3.04 makes 3"),
        (
            {"H0": 70, "Om0": 0.3, "Tcmb0": 2.7, "Neff": 0.5, "m_nu": 0.06},
            "m_nu holds 1 masses, but Neff = 0.5 makes 0",
        ),
        ({"H0": 70, "Om0": 0.3, "Tcmb0": 2.7, "m_nu": [0.0, 0.0, "x"]}, "m_nu = 'x', but"),
        # So much dark energy that the universe bounced, at z = 0.45: there is no beginning.
        ({"H0": 70, "Om0": 0.1, "Ode0": 2.0}, "does not expand from a beginning of time"),
        # Dark energy that grows into the past beyond all bounds.
        ({"H0": 70, "Om0": 0.3, "wa": 300.0}, "does not expand from a beginning of time"),
    ],
)
def test_what_is_not_allowed_is_refused_in_one_sentence_that_says_where(spec: object, sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence) as caught:
        cosmology_from(spec, where=WHERE)
    assert str(caught.value).startswith(f"{WHERE}: ")
    assert "\n" not in str(caught.value)


def test_importing_the_cosmology_does_not_import_those_of_astropy() -> None:
    code = "import sys, hurstfit.cosmology; sys.exit('astropy.cosmology' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
