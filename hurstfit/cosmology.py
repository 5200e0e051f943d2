"""The cosmological model that a user asks for.

It is one of astropy's by name, a table of parameters, or a model made with astropy.  What is asked of it is a cosmic
age, so a model that has none, because it does not expand from a beginning of time, is refused here with a sentence
rather than met later as an integral that does not converge.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from hurstfit.errors import HurstfitError, did_you_mean

# astropy.cosmology takes a second to import: only functions that need it do.
if TYPE_CHECKING:
    from astropy.cosmology import FLRW

__all__ = ["BEGINNING", "check_expansion", "cosmology_from"]

#: Where ages are counted from, as ln(1 + z): the instant before then is lost in rounding.
BEGINNING = 35.0

# What a table may contain: unit, lowest and highest value, whether the lowest itself is allowed.  The bounds of H0
# catch h given in its place.
_BOUNDS: dict[str, tuple[str, float, float, bool]] = {
    "H0": (" km/s/Mpc", 10.0, 500.0, True),
    "Om0": ("", 0.0, math.inf, False),
    "Ode0": ("", -math.inf, math.inf, True),
    "w0": ("", -math.inf, math.inf, True),
    "wa": ("", -math.inf, math.inf, True),
    "Tcmb0": (" K", 0.0, math.inf, True),
    "Neff": ("", 0.0, math.inf, True),
    "m_nu": (" eV", 0.0, math.inf, True),
}
# Effective number of neutrino species where a table does not say: that of the standard model.
_NEFF = 3.04


def cosmology_from(spec: object, *, where: str) -> FLRW:
    """Build the cosmological model that a user asks for.

    Parameters
    ----------
    spec : str, mapping or astropy.cosmology.FLRW
        The name of one of astropy's realisations such as ``"Planck18"``, or a table with H0 (km/s/Mpc) and Om0, and
        optionally Ode0 (flat where absent), w0 and wa (-1 and 0), Tcmb0 (K; 0, no radiation), Neff and m_nu (eV; a
        number or one for each neutrino species), or a model made with astropy.
    where : str
        The place that a complaint should name, such as ``"demo.toml, [clock] cosmology"``.

    Returns
    -------
    astropy.cosmology.FLRW
        A model that expands from a beginning of time, up to redshift 0.

    Raises
    ------
    HurstfitError
        If the name, a key or a value is not allowed, or the model has no finite age.
    """
    from astropy.cosmology import FLRW, realizations

    model: Any
    if isinstance(spec, str):
        if spec not in realizations.available:
            hint = did_you_mean(spec, realizations.available)
            known = ", ".join(realizations.available)
            raise HurstfitError(f"{where}: '{spec}' is not a known model{hint}; give one of {known}, or a table with H0 and Om0")
        model = getattr(realizations, spec)
    elif isinstance(spec, Mapping):
        model = _from_table(spec, where)
    elif isinstance(spec, FLRW):
        model = spec
    else:
        raise HurstfitError(f"{where}: found {spec!r} in place of the name of a model or a table with H0 and Om0")
    check_expansion(model, where)
    return model


def check_expansion(cosmology: FLRW, where: str) -> None:
    """Refuse a model whose age is infinite, or does not fall with redshift all the way from today to the beginning.

    The age falls wherever H(z) is real and positive, and is finite if H(z) grows, so it is H that is looked at.

    Parameters
    ----------
    cosmology : astropy.cosmology.FLRW
        The model.
    where : str
        The place that a complaint should name.

    Raises
    ------
    HurstfitError
        If the model has no finite age.
    """
    z = np.expm1(np.linspace(0.0, BEGINNING, 2000))
    with np.errstate(all="ignore"):
        rate = np.asarray(cosmology.efunc(z))
    bad = ~(np.isfinite(rate) & (rate > 0.0))
    if bad.any():
        raise HurstfitError(
            f"{where}: this model does not expand from a beginning of time (its expansion rate is not a positive "
            f"number at z = {z[bad][0]:.3g}), so it has no cosmic age"
        )
    # Even a universe with nothing in it expands as 1 + z; only dark energy alone goes on for ever.
    if rate[-1] < 1e3:
        raise HurstfitError(f"{where}: this model has no beginning of time, so it has no finite cosmic age")


def _from_table(table: Mapping[Any, Any], where: str) -> FLRW:
    from astropy import cosmology as models
    from astropy import units

    for key in table:
        if key not in _BOUNDS:
            hint = did_you_mean(str(key), _BOUNDS)
            raise HurstfitError(f"{where}: '{key}' is not a parameter of a model{hint}; allowed are {', '.join(_BOUNDS)}")
    for key in ("H0", "Om0"):
        if key not in table:
            raise HurstfitError(f"{where}: {key} is missing; a model needs at least H0 and Om0")
    values: dict[str, Any] = {key: _checked_value(key, value, where) for key, value in table.items()}
    if values.get("Tcmb0", 0.0) == 0.0:
        for key in ("Neff", "m_nu"):
            if key in values:
                raise HurstfitError(f"{where}: {key} has no effect without Tcmb0, the temperature of the background in K")
    if "m_nu" in values:
        species = int(values.setdefault("Neff", _NEFF))
        given = len(values["m_nu"]) if isinstance(values["m_nu"], list) else max(species, 1)
        if given != species:
            raise HurstfitError(
                f"{where}: m_nu holds {given} masses, but Neff = {values['Neff']:g} makes {species} neutrino species"
            )
        values["m_nu"] = values["m_nu"] * units.eV
    flat = "Flat" if "Ode0" not in values else ""
    kind = "w0waCDM" if "wa" in values else "wCDM" if "w0" in values else "LambdaCDM"
    return getattr(models, flat + kind)(**values)


def _checked_value(key: str, value: Any, where: str) -> Any:
    if key == "m_nu" and isinstance(value, (list, tuple)):
        return [_checked_value(key, one, where) for one in value]
    unit, low, high, closed = _BOUNDS[key]
    number = isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
    if number and (low <= value if closed else low < value) and value <= high:
        return float(value)
    if math.isfinite(high):
        allowed = f"a number from {low:g} to {high:g}{unit}"
    elif math.isfinite(low):
        allowed = f"a number {'of at least' if closed else 'above'} {low:g}{unit}"
    else:
        allowed = "a finite number"
    raise HurstfitError(f"{where}: {key} = {value!r}, but it must be {allowed}")
