"""Whatever a file holds, it gives measurements or a sentence; whatever is valid survives storage."""

import itertools
import tempfile
from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from hurstfit.errors import HurstfitError
from hurstfit.measurements import Measurements, read_measurements
from hurstfit.measurements.checks import first_overlap

HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,rising,note"
GOOD_CSV = f"""\
{HEADER}
Larkspur-Deep,0.2,0.5,10.0,10.5,812,201,true,
Larkspur-Deep,0.5,0.8,10.0,10.5,640,118,true,"a, b"
Tansy Wide,0.5,0.8,10.0,10.5,4410,903,FALSE,c
"""


def _read(content, extension):
    """Read bytes as a file; the bins, or the sentence."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / f"bins{extension}"
        path.write_bytes(content)
        try:
            return read_measurements(path)
        except HurstfitError as error:
            return str(error)


GOOD_ECSV = _read(GOOD_CSV.encode(), ".csv").to_ecsv().replace("- {name: row, datatype: int64}\n# ", "")
GOOD_ECSV = "\n".join(line if line.startswith("#") else line.partition(" ")[2] for line in GOOD_ECSV.splitlines())

extensions = st.sampled_from([".csv", ".ecsv"])
fragments = st.sampled_from(
    [
        *["", ",", '"', "\n", "\r", "#", ";", "\t", " ", "\x1c", "\u2028", "\x85", "\ufeff", "\ud7ff", "z_lo"],
        *["nan", "inf", "1e400", "-1", "true", "0,5"],
        *["{", "}", ": ", "- ", "!!", "&a", "*a", "unit: kg", "%ECSV", "---", "[", "subtype: json"],
    ]
) | st.text(max_size=3)


def _is_bins_or_sentence(result):
    if isinstance(result, str):
        assert "bins." in result
        assert len(result.splitlines()) == 1
    else:
        assert isinstance(result, Measurements)
        assert result.n_bins > 0
        assert (result.n_quiescent <= result.n_total).all()
        assert (result.z_lo < result.z_hi).all()
        assert Measurements.from_ecsv_text(result.to_ecsv(), "x").to_ecsv() == result.to_ecsv()


def test_the_tables_that_are_mutated_below_are_valid():
    assert _read(GOOD_CSV.encode(), ".csv").n_bins == 3
    assert _read(GOOD_ECSV.encode(), ".ecsv").n_bins == 3


@settings(deadline=None, max_examples=60)
@given(st.binary(max_size=200) | st.text(max_size=200).map(str.encode), extensions)
def test_arbitrary_content_gives_a_sentence(content, extension):
    _is_bins_or_sentence(_read(content, extension))


@settings(deadline=None, max_examples=150)
@given(
    st.sampled_from([(GOOD_CSV, ".csv"), (GOOD_ECSV, ".ecsv"), (GOOD_ECSV, ".csv")]),
    st.lists(st.tuples(st.integers(0, 10_000), st.integers(0, 6), fragments), min_size=1, max_size=3),
)
def test_a_table_with_pieces_changed_gives_measurements_or_a_sentence(start, changes):
    text, extension = start
    for at, length, fragment in changes:
        at %= len(text) + 1
        text = text[:at] + fragment + text[at + length :]
    _is_bins_or_sentence(_read(text.encode("utf-8", "replace"), extension))


@settings(deadline=None, max_examples=60)
@given(st.sampled_from(["ecsv", "csv"]), st.text(st.characters(codec="utf-8"), max_size=60))
def test_an_arbitrary_header_gives_measurements_or_a_sentence(kind, header):
    comment = "".join(f"# {line}\n" for line in header.splitlines())
    _is_bins_or_sentence(_read(f"# %ECSV 1.0\n# ---\n{comment}{GOOD_CSV}".encode(), f".{kind}"))


names = (
    st.text(st.characters(codec="utf-8"), min_size=1, max_size=12)
    .map(str.strip)
    .filter(lambda s: s and s.isprintable() and not s.startswith("#") and not set(s) & set("[]/"))
)
notes = st.text(st.characters(codec="utf-8"), max_size=20).map(str.strip).filter(str.isprintable)


@st.composite
def _valid_tables(draw):
    """Rows of valid tables: bins between rising edges, of several studies, in any order."""
    rows = []
    for study in draw(st.lists(names, min_size=1, max_size=3, unique=True)):
        z = sorted(draw(st.lists(st.integers(0, 10**6), min_size=2, max_size=4, unique=True)))
        m = sorted(draw(st.lists(st.integers(0, 20 * 10**6), min_size=2, max_size=4, unique=True)))
        for (z_lo, z_hi), (m_lo, m_hi) in itertools.product(itertools.pairwise(z), itertools.pairwise(m)):
            total = draw(st.integers(1, 2**53))
            edges = (z_lo / 1e5, z_hi / 1e5, m_lo / 1e6, m_hi / 1e6)
            rows.append((study, *edges, total, draw(st.integers(0, total)), draw(st.booleans()), draw(notes)))
    return draw(st.permutations(rows))


def _quoted(cell):
    text = str(cell).replace('"', '""')
    return f'"{text}"'


@settings(deadline=None, max_examples=60)
@given(_valid_tables())
def test_valid_tables_are_read_as_written_and_survive_storage(rows):
    text = "\n".join([HEADER, *(",".join(map(_quoted, row)) for row in rows)])
    bins = _read(text.encode(), ".csv")
    assert isinstance(bins, Measurements), bins
    columns = list(zip(*rows, strict=True))
    for name, column in zip(HEADER.split(",")[:-1], columns, strict=False):
        np.testing.assert_array_equal(getattr(bins, name), column)
    assert bins.table["note"].tolist() == list(columns[-1])
    after = Measurements.from_ecsv_text(bins.to_ecsv(), bins.path)
    for name in HEADER.split(",")[:-1]:
        np.testing.assert_array_equal(getattr(after, name), getattr(bins, name))
    assert after.table["note"].tolist() == list(columns[-1])


@settings(deadline=None)
@given(
    st.lists(
        st.tuples(st.integers(0, 1), st.integers(0, 8), st.integers(0, 4), st.integers(0, 8), st.integers(0, 4)), max_size=12
    )
)
def test_the_sweep_finds_an_overlap_exactly_where_comparing_all_pairs_does(bins):
    group, x, dx, y, dy = np.array(bins, int).reshape(-1, 5).T
    boxes = np.array([x, x + dx, y, y + dy], float)

    def share(i, j):
        width = min(boxes[1, i], boxes[1, j]) - max(boxes[0, i], boxes[0, j])
        height = min(boxes[3, i], boxes[3, j]) - max(boxes[2, i], boxes[2, j])
        return bool(group[i] == group[j] and width > 0 and height > 0)

    pairs = [(i, j) for i, j in itertools.combinations(range(len(bins)), 2) if share(i, j)]
    found = first_overlap(group, *boxes)
    assert (found is not None) == bool(pairs)
    if found is not None:
        assert tuple(sorted(found)) in pairs
