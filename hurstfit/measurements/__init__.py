"""Tables of counted fractions: one row a bin of redshift and stellar mass, one study a publication or a field.

`read_measurements` turns a file into `Measurements` or refuses it with a sentence.  The steps are modules of their own:
`cells` splits text into named columns of strings, `checks` turns those into numbers and refuses what cannot be a
measurement, `reading` opens the file, and `table` holds the result.

astropy's tables take a third of a second to import, so no module here imports them before a table is read.
"""

from __future__ import annotations

from hurstfit.measurements.reading import read_measurements
from hurstfit.measurements.table import Measurements

__all__ = ["Measurements", "read_measurements"]
