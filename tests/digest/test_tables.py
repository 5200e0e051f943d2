"""What a fraction table says: definitions as text, answers as lines, and a figure that can be read."""

from __future__ import annotations

import functools
import itertools

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from hurstfit.clock import CosmicClock
from hurstfit.cosmology import cosmology_from
from hurstfit.digest.tables import DEFAULT_DEFINITIONS, definitions_of, implied_lines, parse_definition, table_figure
from hurstfit.errors import HurstfitError
from hurstfit.fractions.definition import Criterion, Definition
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.walks import NOISE_TYPES


@functools.cache
def shipped_table(noise: str) -> FractionTable:
    """Load a table that ships, once."""
    return load_table(noise)


@functools.cache
def planck() -> CosmicClock:
    return CosmicClock.build(cosmology_from("Planck18", where="test"))


# -- definitions as text -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "definition"),
    [
        ("", Definition()),
        ("min_mass=all", Definition()),
        ("min_mass=0", Definition(0.0)),
        (" min_mass = 0.1 , criterion = rate<0.2 ", Definition(0.1, Criterion("rate", 0.2))),
        ("window=50,window_unit=Myr", Definition(window=50.0, window_unit="Myr")),
        ("criterion=rate<0.2,scatter=0.25,window=10", Definition(None, Criterion("rate", 0.2), 10.0, scatter=0.25)),
        ("criterion=ssfr<0.2,returned_fraction=0.4", Definition(None, Criterion("ssfr", 0.2), returned_fraction=0.4)),
    ],
)
def test_definitions_are_read_as_users_write_them(text: str, definition: Definition) -> None:
    assert parse_definition(text) == definition


@pytest.mark.parametrize(
    ("text", "fragments"),
    [
        ("min_mas=0.1", ("'min_mas=0.1'", "did you mean 'min_mass'?")),
        ("window", ("'window'", "key=value")),
        ("window=", ("'window='", "key=value")),
        ("window=ten", ("window is 'ten'",)),
        ("window=0", ("window is '0'",)),
        ("window=-1", ("window is '-1'",)),
        ("window=nan", ("window is 'nan'",)),
        ("window=inf", ("window is 'inf'",)),
        ("window=1,window=2", ("window appears twice",)),
        ("min_mass=-0.1", ("min_mass is '-0.1'",)),
        ("scatter=-0.1", ("scatter is '-0.1'",)),
        ("window_unit=Gyr", ("window_unit is 'Gyr'", "steps and Myr")),
        ("criterion=nought", ("'nought' is not a criterion", "'zero'")),
        ("criterion=rate<0", ("'rate<0' is not a criterion",)),
        ("criterion=ssfr<0.2", ("returned_fraction left out", "needs one")),
        ("returned_fraction=0.4", ("criterion is zero", "no other criterion takes one")),
        ("criterion=ssfr<0.2,returned_fraction=1", ("returned_fraction is '1'", "below 1")),
    ],
)
def test_definitions_that_are_none_are_refused_in_one_sentence(text: str, fragments: tuple[str, ...]) -> None:
    with pytest.raises(HurstfitError) as caught:
        parse_definition(text)
    assert "\n" not in str(caught.value)
    for fragment in (f"definition {text!r}", *fragments):
        assert fragment in str(caught.value)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_default_definitions_are_all_held_by_the_tables_that_ship(noise: str) -> None:
    table = shipped_table(noise)
    definitions = definitions_of(table, [])
    assert len(set(definitions)) == len(DEFAULT_DEFINITIONS)
    for definition in definitions:
        assert 0 < float(table.surface(definition)(0.8, 600.0, definition.window)) < 1


# -- answers -------------------------------------------------------------------------------------------------------------------


def exponents(line: str) -> list[float]:
    return [float(word) for word in line.split("  ")[1].removeprefix("H = ").split(" or ")]


def test_answers_are_those_h_at_which_the_table_has_the_fraction() -> None:
    table, definition = shipped_table("type-I"), Definition(0.1)
    head, line = implied_lines(table, [definition], planck(), 0.065, 0.5, 20.0, 12.0)
    steps = float((planck().age(np.array(0.5)) - planck().age(np.array(12.0))) / 20.0)
    assert f"{steps:.0f} steps of 20 Myr since redshift 12" in head
    found = exponents(line)
    assert len(found) == 2
    # three decimals of H
    slope = np.abs(np.gradient(table.fraction(np.linspace(0.5, 0.99, 50), steps, min_mass=0.1), 0.01)).max()
    np.testing.assert_allclose(table.fraction(found, steps, min_mass=0.1), 0.065, atol=0.5e-3 * slope)


def test_windows_in_myr_and_specific_rates_follow_the_clock() -> None:
    table = shipped_table("type-II")

    def answer(text: str, step: float) -> list[float]:
        return exponents(implied_lines(table, [parse_definition(text)], planck(), 0.05, 1.0, step, 12.0)[1])

    assert answer("window=200,window_unit=Myr", 20.0) == answer("window=10", 20.0)
    assert answer("window=200,window_unit=Myr", 40.0) == answer("window=5", 40.0)
    # T (1 - R) x age of the walk / cosmic age
    now, start = (float(planck().age(np.array(z))) for z in (1.0, 12.0))
    theta = 0.3 * (1 - 0.4) * (now - start) / now
    assert answer("criterion=ssfr<0.3,returned_fraction=0.4", 20.0) == answer(f"criterion=rate<{theta!r}", 20.0)


def test_where_no_h_has_the_fraction_the_reach_of_the_table_is_told() -> None:
    _, line = implied_lines(shipped_table("type-I"), [Definition(0.1)], planck(), 0.5, 0.5, 20.0, 12.0)
    assert line.startswith("  no H (the table goes from 0.0")
    assert line.endswith("zero, mass > 0.1 of the mean")


NAN = float("nan")


@pytest.mark.parametrize(
    ("question", "sentence"),
    [
        ((0.0, 0.5, 20.0, 12.0), "--fraction is 0; allowed is a number between 0 and 1"),
        ((1.0, 0.5, 20.0, 12.0), "--fraction is 1"),
        ((NAN, 0.5, 20.0, 12.0), "--fraction is nan"),
        ((0.1, -0.5, 20.0, 12.0), "--redshift is -0.5"),
        ((0.1, 12.0, 20.0, 12.0), "--redshift is 12; allowed is 0 or more, and below the start of the walk at 12"),
        ((0.1, NAN, 20.0, 12.0), "--redshift is nan"),
        ((0.1, 0.5, 0.0, 12.0), "--step is 0"),
        ((0.1, 0.5, NAN, 12.0), "--step is nan"),
        ((0.1, 0.5, float("inf"), 12.0), "--step is inf"),
        ((0.1, 0.5, 20.0, 40.0), "--z-start is 40; allowed is a redshift above 0 and up to 30"),
        ((0.1, 0.5, 20.0, NAN), "--z-start is nan"),
        ((0.1, 0.5, 2.0, 12.0), "the type-I table holds step number from 1 to 2048, not 4"),
        ((0.1, 11.99, 20.0, 12.0), "step number from 1 to 2048, not 0.0"),
    ],
)
def test_questions_that_have_no_answer_are_refused(question: tuple[float, ...], sentence: str) -> None:
    with pytest.raises(HurstfitError) as caught:
        implied_lines(shipped_table("type-I"), [Definition()], planck(), *question)
    assert sentence in str(caught.value)


@pytest.mark.parametrize("limit", [0.001, 40.0])
def test_a_specific_rate_beyond_the_thresholds_of_the_table_is_refused(limit: float) -> None:
    definition = parse_definition(f"criterion=ssfr<{limit},returned_fraction=0.4")
    with pytest.raises(HurstfitError, match=r"holds thresholds from 0\.01 to 1"):
        implied_lines(shipped_table("type-I"), [definition], planck(), 0.1, 0.5, 20.0, 12.0)


# -- the figure ----------------------------------------------------------------------------------------------------------------


def drawn(noise: str, texts: tuple[str, ...], fraction: float | None = 0.1):
    table = shipped_table(noise)
    figure = table_figure(table, definitions_of(table, texts), fraction)
    FigureCanvasAgg(figure).draw()
    return figure


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_figure_shows_what_the_table_holds(noise: str) -> None:
    figure = drawn(noise, ())
    table = shipped_table(noise)
    left, right = figure.axes
    assert len(left.lines) == len(right.lines) == len(DEFAULT_DEFINITIONS) + 1
    h, values = left.lines[1].get_data()
    np.testing.assert_allclose(values, table.fraction(h, 600.0, min_mass=0.1), atol=1e-12)
    steps, values = right.lines[2].get_data()
    np.testing.assert_allclose(values, table.fraction(0.8, steps, "rate<0.2", min_mass=0.1), atol=1e-12)
    assert left.lines[-1].get_ydata()[0] == 0.1


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_axes_titles_and_legend_say_what_is_drawn(noise: str) -> None:
    figure = drawn(noise, ())
    left, right = figure.axes
    assert left.get_xlabel() == "correlation (Hurst) exponent $H$"
    assert right.get_xlabel() == "step number $n$"
    assert left.get_ylabel() == "quiescent fraction"
    assert "600" in left.get_title()
    assert "0.8" in right.get_title()
    assert noise in left.get_title()
    labels = [text.get_text() for text in figure.legends[0].get_texts()]
    assert labels == [d.label() for d in definitions_of(shipped_table(noise), ())]
    assert right.get_xscale() == "log"
    # told apart in grey too
    assert len({str(line.get_linestyle()) + str(line.get_dashes() if hasattr(line, "get_dashes") else line._dash_pattern)
                for line in left.lines[:-1]}) == len(labels)  # fmt: skip


SIX = (
    "",
    "min_mass=0",
    "min_mass=0.1",
    "min_mass=0.1,criterion=rate<0.2",
    "min_mass=0.25,criterion=rate<0.35,window=12.5,scatter=0.2",
    "min_mass=0.5,criterion=rate<0.05,window=100,scatter=0.3",
)


@pytest.mark.parametrize("texts", [(), ("",), SIX])
@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_no_text_overlaps_another_or_leaves_the_figure(noise: str, texts: tuple[str, ...]) -> None:
    figure = drawn(noise, texts)
    renderer = figure.canvas.get_renderer()
    texts_drawn = [*figure.legends[0].get_texts()]
    for axes in figure.axes:
        texts_drawn += [axes.title, axes.xaxis.label, axes.yaxis.label, *axes.texts]
        for axis in (axes.xaxis, axes.yaxis):
            # ticks beyond the limits of the axes are made but not drawn
            lo, hi = axis.get_view_interval()
            ticks = [t for t in (*axis.get_major_ticks(), *axis.get_minor_ticks()) if lo <= t.get_loc() <= hi]
            texts_drawn += [t.label1 for t in ticks if t.label1.get_visible()]
    boxes = [(t.get_text(), t.get_window_extent(renderer)) for t in texts_drawn if t.get_text().strip()]
    assert len(boxes) > 15
    for (a, first), (b, second) in itertools.combinations(boxes, 2):
        assert not (first.shrunk(0.98, 0.98).overlaps(second.shrunk(0.98, 0.98))), (a, b)
    for name, box in boxes:
        assert figure.bbox.x0 <= box.x0, name
        assert box.x1 <= figure.bbox.x1, name
        assert figure.bbox.y0 <= box.y0, name
        assert box.y1 <= figure.bbox.y1, name
    # large enough for a slide: at least 8 points on 10 inches
    assert min(t.get_fontsize() for t in figure.findobj(Text) if t.get_text()) >= 8
    for axes in figure.axes:
        assert axes.get_window_extent(renderer).height > 0.45 * figure.bbox.height


@pytest.mark.parametrize(
    ("texts", "sentence"),
    [
        (("criterion=ssfr<0.2,returned_fraction=0.4",), "follows the clock"),
        (("window=100,window_unit=Myr",), "follows the clock"),
        (tuple(f"window={w}" for w in range(1, 8)), "at most 6 definitions, not 7"),
        (("min_mass=0.9",), "not 0.9"),
        (("criterion=rate<2",), "not 2"),
    ],
)
def test_what_cannot_be_drawn_is_refused(texts: tuple[str, ...], sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence):
        drawn("type-I", texts)
