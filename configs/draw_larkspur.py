"""Draw the counts of the Larkspur demo: an invented sky programme, not a measurement of anything.

Three studies that do not exist are drawn from the model itself, at an H, a clock and selection terms that are stated below and in
the table's metadata, so that a user can see whether an inference finds them again.

    python configs/draw_larkspur.py configs/larkspur.ecsv
"""

from __future__ import annotations

import sys
from itertools import pairwise

import numpy as np
from astropy.table import Table

import hurstfit as hf
from hurstfit.clock import CosmicClock
from hurstfit.cosmology import cosmology_from
from hurstfit.fractions.definition import Definition
from hurstfit.prediction import BinPrediction
from hurstfit.selection import counted_fraction

SEED = 4210
TRUTH = {"H": 0.83, "step": 20.0, "z_start": 12.0, "noise": "type-II", "criterion": "zero", "parent sample": "all walks"}
#: completeness ratio, missed fraction, contamination; redshift edges; log-mass edges; galaxies in the lowest bin, and how
#: fast they fade
STUDIES = {
    "Larkspur-Wide": ((0.95, 0.06, 0.020), (0.2, 0.4, 0.6, 0.8, 1.0), (10.2, 10.8, 11.4), 1400, 0.6),
    "Larkspur-Deep": ((0.88, 0.10, 0.035), (0.5, 0.8, 1.1, 1.5, 2.0, 2.5, 3.0), (9.8, 11.4), 900, 0.5),
    "Larkspur-Far": ((0.80, 0.15, 0.050), (1.5, 2.0, 2.5, 3.0, 3.5, 4.0, 4.5), (10.0, 11.4), 260, 0.45),
}
#: The one bin in which quenching is meant to have set in: its counts are higher than the walk alone would give.
NOT_RISING = ("Larkspur-Wide", 0.2, 10.8)


def main(path: str) -> None:
    """Draw all bins and write the table."""
    rng = np.random.default_rng(SEED)
    clock = CosmicClock.build(cosmology_from("Planck18", where="demo"))
    surface = hf.load_table("type-II").surface(Definition())
    rows = []
    for study, (terms, z_edges, m_edges, first, fade) in STUDIES.items():
        for z_lo, z_hi in pairwise(z_edges):
            edges = np.array([z_lo]), np.array([z_hi])
            prediction = BinPrediction(surface, Definition(), clock, *edges, (TRUTH["step"], TRUTH["z_start"]))
            fraction = prediction(*(np.array([TRUTH[name]]) for name in ("H", "step", "z_start")))[0][0, 0]
            for k, (m_lo, m_hi) in enumerate(pairwise(m_edges)):
                rising = (study, z_lo, m_lo) != NOT_RISING
                true = fraction if rising else fraction + (1 - fraction) * 0.3
                total = int(rng.poisson(first * np.exp(-fade * (z_lo - z_edges[0])) * 0.35**k))
                quiescent = int(rng.binomial(total, counted_fraction(true, *terms)))
                rows.append((study, z_lo, z_hi, m_lo, m_hi, total, quiescent, rising))
    names = ["study", "z_lo", "z_hi", "logm_lo", "logm_hi", "n_total", "n_quiescent", "rising"]
    table = Table(rows=rows, names=names)
    table["logm_lo"].unit = table["logm_hi"].unit = "dex(solMass)"
    table.meta["comments"] = [
        "INVENTED DATA: the Larkspur programme does not exist; counts drawn from the model by configs/draw_larkspur.py"
    ]
    table.meta["drawn_at"] = {**TRUTH, "data seed": SEED}
    table.meta["drawn_with"] = {
        study: dict(zip(("completeness_ratio", "missed_fraction", "contamination"), terms[0], strict=True))
        for study, terms in STUDIES.items()
    }
    table.write(path, format="ascii.ecsv", overwrite=True)


if __name__ == "__main__":
    main(sys.argv[1])
