"""Reading tables, thinning series and cleaning drawings."""

import re
from pathlib import Path

import numpy as np
import pytest

from idlearn.reports import drawing
from idlearn.reports.pictures_loop import read_limits
from idlearn.reports.pictures_record import idle_spans, plant_ratios
from idlearn.reports.runfiles import Table, read_table
from idlearn.reports.swatches import _MARKER, sign, swatch


def table(**columns: list[object]) -> Table:
    return Table("t", {k: np.array(v, dtype=object) for k, v in columns.items()}, True)


def test_a_table_is_read_as_it_stands(tmp_path: Path) -> None:
    path = tmp_path / "t.csv"
    path.write_text('\ufeffname,value,flag\n"a,b",1.5,True\nc,,false\nd\n', encoding="utf-8")
    t = read_table(path)
    assert t.text("name") == ["a,b", "c", "d"]
    np.testing.assert_array_equal(t.number("value"), [1.5, np.nan, np.nan])
    assert t.flag("flag").tolist() == [True, False, False]
    assert t.where(name="c").text("flag") == ["false"]
    assert np.isnan(t.number("no such column")).all()


def test_a_missing_or_empty_file_is_an_empty_table(tmp_path: Path) -> None:
    assert not read_table(tmp_path / "no.csv").present
    (tmp_path / "empty.csv").write_bytes(b"")
    assert len(read_table(tmp_path / "empty.csv")) == 0


def test_groups_keep_the_order_of_the_file() -> None:
    t = table(a=["x", "y", "x"], b=[1, 2, 3])
    assert [(k, g.text("b")) for k, g in t.groups("a")] == [(("x",), ["1", "3"]), (("y",), ["2"])]


def test_thinning_keeps_every_extreme_of_the_record() -> None:
    rng = np.random.default_rng(3)
    x = np.arange(5000.0)
    y, z = rng.normal(size=(2, 5000))
    y[1234], z[4321] = 50.0, -60.0
    y[2000:2600] = np.nan
    t, (thin_y, thin_z) = drawing.envelope(x, y, z, buckets=50)
    assert len(t) <= 50 * 4 + 2
    assert np.nanmax(thin_y) == 50.0
    assert thin_z.min() == -60.0
    assert np.isnan(thin_y).any()
    assert np.all(np.diff(t) > 0)


def test_a_short_series_is_left_alone() -> None:
    x = np.arange(10.0)
    t, (y,) = drawing.envelope(x, x**2, buckets=50)
    assert t is x
    np.testing.assert_array_equal(y, x**2)


def test_spans_hold_all_finite_values() -> None:
    low, high = drawing.span_of(np.array([1.0, np.nan, 3.0]), np.array([-2.0, np.inf]))
    assert low < -2
    assert high > 3
    assert drawing.span_of(np.array([np.nan])) == (0.0, 1.0)
    low, high = drawing.span_of(np.array([7.0, 7.0]))
    assert low < 7 < high


def test_ratio_limits_hold_one_and_what_is_near() -> None:
    low, high = drawing.ratio_limits([0.8, 1.4, np.nan, 0.0, -1.0, np.inf])
    assert low < 0.8
    assert 1.4 < high < 2
    low, high = drawing.ratio_limits([1e9], most=4.0)
    assert 4 < high < 6


@pytest.mark.parametrize(
    ("low", "high"), [(0.94, 1.06), (0.7, 1.1), (0.4, 2.5), (0.1, 10.0), (1e-4, 1e6), (0.99, 1.2)]
)
def test_ratio_ticks_are_few_apart_and_inside(low: float, high: float) -> None:
    with drawing.drawing():
        figure = drawing.canvas(300, 100)
        axes = drawing.place(figure, 10, 10, 280, 60)
        drawing.ratio_axis(axes, "x", low, high, most=6)
        ticks = np.asarray(axes.xaxis.get_majorticklocs())
    assert 2 <= len(ticks) <= 7
    assert np.all((ticks >= low) & (ticks <= high))
    apart = np.diff(np.log(ticks)) / np.log(high / low)
    assert apart.min() > 0.06  # a twentieth of the axis is about the width of a label


def test_a_drawing_is_clean_and_its_own() -> None:
    svgs = []
    with drawing.drawing():
        for name in ("one", "two"):
            figure = drawing.canvas(300, 100)
            axes = drawing.place(figure, 10, 10, 280, 60)
            axes.axhspan(0.2, 0.4, hatch="//", facecolor="none")
            axes.plot([0, 1], [0, 1])
            drawing.write(figure, 5, 8, "<i>$\\frac{1}{2}$</i> 漢字 -->")
            svgs.append(drawing.to_svg(figure, name))
    for svg in svgs:
        assert "&lt;i&gt;$\\frac{1}{2}$&lt;/i&gt; 漢字 --&gt;" in svg
        assert not re.search(r"http|<metadata|<!--|<style|<i>", svg)
        names = re.findall(r' id="([^"]*)"', svg)
        used = re.findall(r'(?:url\(#|href="#)([^)"]+)', svg)
        assert set(used) == set(names)
        assert used
    one, two = (set(re.findall(r' id="([^"]*)"', s)) for s in svgs)
    assert not one & two


def test_unused_spans_of_a_log() -> None:
    time = np.arange(8.0) * 10
    used = np.array([0, 1, 1, 0, 0, 1, 1, 0], dtype=bool)
    assert idle_spans(time, used) == [(0.0, 10.0), (30.0, 50.0), (70.0, 70.0)]
    assert idle_spans(time, np.ones(8, dtype=bool)) == []


def test_ratio_per_plant_is_that_of_its_mean_costs() -> None:
    t = table(plant=["a", "a", "b"], cost=[1, 3, 2], baseline_cost=[2, 2, 4], ratio=[0.5, 1.5, 0.5])
    found = plant_ratios(t)
    assert found["a"][0] == pytest.approx(4 / 4)  # by hand
    assert found["a"][1:] == pytest.approx((0.6, 1.4))  # tenths between 0.5 and 1.5
    assert found["b"] == pytest.approx((0.5, 0.5, 0.5))


def test_limits_that_are_no_numbers_are_none() -> None:
    t = table(name=["u"], low=[""], high=["5"])
    limits = read_limits(t)["u"]
    assert limits.low == -np.inf
    assert limits.high == 5.0


def test_each_look_has_a_swatch_and_each_state_its_sign() -> None:
    from idlearn.reports.inks import look_of

    names = [{"name": str(i), "kind": "classical"} for i in range(14)]
    drawn = {swatch(x) for x in look_of(names, "", "").values()}
    assert len(drawn) >= 10
    assert set("os^vDPX|") <= set(_MARKER)
    assert len({sign(s) for s in ("met", "failed", "open")}) == 3
    assert sign("anything") == ""
