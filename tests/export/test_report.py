import base64
import io
import re
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import matplotlib.image
import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import SurveyError
from gradred.export import figures
from gradred.export.report import ReportSettings, picture, said, write_report
from gradred.inversion.cautions import CAUTION
from gradred.newton.sheet import dipping_sheet
from tests.export.parts import Page, grid_of, ledger_lines, lines_of, model_of, texts
from tests.synthetic import CRS, EAST, NORTH

NAME = "<b>Block</b> \"7\" & <script>alert('$')</script>"
PLAIN = ReportSettings(survey_name=NAME, crs=CRS, profiles=1, dots=60)
BRIEF = PLAIN.model_copy(update={"profiles": 0})


def page_of(parts: dict[str, xr.Dataset], settings: ReportSettings = PLAIN) -> str:
    """Return the page of some parts, and see that they stay as they are."""
    before = {name: part.copy(deep=True) for name, part in parts.items()}
    with TemporaryDirectory() as folder:
        made: list[Path] = write_report(settings, Path(folder), **parts)
        for name, part in parts.items():
            xr.testing.assert_identical(part, before[name])
        assert made == list(Path(folder).iterdir()) == [Path(folder) / "report.html"]
        return made[0].read_text(encoding="utf-8")


def fitted_model(lines: xr.Dataset) -> xr.Dataset:
    model = model_of()
    for kind in ("bodies", "voxels"):
        half = 0.5 * lines["gradient"].to_numpy()
        for what in ("predicted", "residual"):
            model = survey.put("model", model, f"{what}_{kind}", half, frame="enu")
        model = survey.put("model", model, f"chi_squared_{kind}", np.arange(6) + 0.25)
    return model


@cache
def whole() -> str:
    lines = ledger_lines().assign_attrs(
        record='[{"stage": "read_lines", "settings": {"a": "<i>", "b": 1}}]'
    )
    return page_of({"lines": lines, "grid": grid_of(), "model": fitted_model(lines)})


def test_the_page_needs_no_network_and_runs_nothing() -> None:
    text = whole()
    for forbidden in ("http://", "https://", "<script", "javascript:", "@import", "url(", "<link"):
        assert forbidden not in text.lower(), forbidden
    page = Page(text)
    tags = {name for name, _ in page.tags}
    assert not tags & {"script", "iframe", "object", "embed", "link", "form"}
    assert all(not name.startswith("on") for _, attrs in page.tags for name in attrs)
    targets = {attrs["id"] for _, attrs in page.tags if "id" in attrs}
    assert {f"#{name}" for name in targets} == {a["href"] for a in page.of("a")}
    assert next(page.of("html"))["lang"] == "en"
    assert next(page.of("meta"))["charset"] == "utf-8"


def test_names_are_words_and_not_tags() -> None:
    text = whole()
    assert "<b>" not in text
    assert "&lt;b&gt;Block&lt;/b&gt;" in text
    page = Page(text)
    # the browser reads the name back as it was given
    assert NAME in page.words
    assert f"{NAME}: reduction report" in page.words
    assert ["read_lines", '{"a": "<i>", "b": 1}'] in page.cells


def test_every_picture_has_words_and_is_inside_the_page() -> None:
    pictures = list(Page(whole()).of("img"))
    # lines, ledger, profile, residuals, field, voxels, trade-off
    assert len(pictures) == 7
    for shown in pictures:
        assert shown["alt"]
        kind, content = str(shown["src"]).split(",", 1)
        assert kind == "data:image/png;base64"
        image = matplotlib.image.imread(io.BytesIO(base64.b64decode(content, validate=True)))
        assert image.shape[2] == 4
        assert np.ptp(image) > 0.0


def test_the_caution_stands_at_the_top_and_over_the_model() -> None:
    page = Page(whole())
    assert page.words.count(CAUTION) == 2
    assert page.words.index(CAUTION) < page.words.index("What was flown")
    assert "not unique" in CAUTION


def test_the_page_tells_the_ledger_that_a_pencil_finds() -> None:
    cells = Page(whole()).cells
    # n = 1, 2, 3 in every component: rms √(14/3) = 2.160
    assert ["as read", *["21.6"] * 6, "30"] in cells
    assert ["rotation of the platform", *["2.16 ± 0.5"] * 6, "3"] in cells
    assert ["attraction of the terrain", *["6.48 ± 2.2"] * 6, "9"] in cells
    assert ["left", *["13 ± 4"] * 6, "18"] in cells
    assert "to 0 E at every station" in " ".join(Page(whole()).words)
    assert ["spike", "1"] in cells
    assert ["stations", "4"] in cells
    assert ["flown", "2031-03-05 to 2031-03-05"] in cells
    assert ["density of the ground, kg/m3", "2480"] in cells


def test_the_page_tells_bodies_and_misfits() -> None:
    cells = Page(whole()).cells
    assert ["1, sphere", "density", "450.1", "± 33", "kg/m3"] in cells
    assert ["1, sphere", "radius", "60.0", "held", "m"] in cells
    assert ["2, prism", "top", "-40.0", "± 4", "m"] in cells
    assert ["voxels, chi-squared", "0.25", "1.25", "2.25", "3.25", "4.25", "5.25"] in cells


def test_the_closure_on_the_page_is_the_gap_of_the_lines() -> None:
    lines = ledger_lines()
    # one reading out by 2 E: as read is not what is left and removed
    values = lines["as_read"].to_numpy().copy()
    values[2, 4] += 2.0
    broken = survey.put("lines", lines, "as_read", values, frame="enu")
    assert "to 2 E at every station" in " ".join(Page(page_of({"lines": broken}, BRIEF)).words)


def test_each_part_alone_makes_its_own_sections() -> None:
    sections = {
        "lines": ["What was flown", "What was removed", "How good it is"],
        "grid": ["The field"],
        "model": ["The model"],
    }
    bodies = model_of()[["body_kind", "body_parameter", "body_value", "body_sigma"]]
    parts = {"lines": ledger_lines(), "grid": grid_of(), "model": bodies}
    for part, expected in sections.items():
        page = Page(page_of({part: parts[part]}))
        told = [word for word in page.words if any(word in names for names in sections.values())]
        # once in the contents, once as a heading
        assert told == expected * 2
        assert CAUTION in page.words
    page = Page(page_of({}))
    assert not list(page.of("img"))
    assert [a["href"] for a in page.of("a")] == ["#record"]


def test_the_settings_bound_the_number_of_profiles() -> None:
    lines = lines_of(22)
    page = page_of({"lines": lines}, BRIEF.model_copy(update={"profiles": 30}))
    assert re.findall(r'alt="Line (L\d+)', page) == ["L000", "L001"]
    assert figures.chosen_lines(lines, 0) == []


@pytest.mark.parametrize("count", [1, 11])
def test_a_single_station_or_line_has_a_page(count: int) -> None:
    # nothing removed, one line exactly north: no width of its own
    page = Page(page_of({"lines": lines_of(count)}))
    assert len(list(page.of("img"))) == 3
    axes = figures.survey_map(lines_of(count), None).axes[0]
    assert np.ptp(axes.get_xlim()) >= 0.1
    assert axes.get_xlim()[0] < 1e-3 * (EAST + 100.0) < axes.get_xlim()[1]


def test_lines_that_are_flagged_throughout_have_a_page() -> None:
    lines = survey.flag(ledger_lines(), "reading_missing", np.ones(4, dtype=bool))
    model = fitted_model(lines)
    smooth = [name for name in model.data_vars if str(name).startswith("voxel_")]
    page = Page(page_of({"lines": lines, "model": model.drop_vars(smooth)}))
    assert ["reading missing", "4"] in page.cells
    assert ["left", *["nan"] * 6, "0"] in page.cells


def test_columns_without_a_value_have_a_page() -> None:
    lines = ledger_lines()
    for name in ("clearance", "terrain_height"):
        lines = survey.put("lines", lines, name, np.full(4, np.nan))
    removed = np.full((4, 6), np.nan)
    lines = survey.put("lines", lines, "removed_motion", removed, frame="enu")
    assert not any(row[0] == "clearance" for row in Page(page_of({"lines": lines})).cells if row)


def test_a_line_name_with_dollars_is_no_formula() -> None:
    name = r"<i>$\frac{$"
    lines = survey.put("lines", ledger_lines(), "line", np.array([name] * 4))
    # a name read as a formula would stop the drawing
    assert picture(figures.line_profile(lines, name, None), 60).startswith("data:image/png")


def test_the_profile_shows_what_is_left_and_what_is_predicted() -> None:
    lines = ledger_lines()
    figure = figures.line_profile(lines, "L000", fitted_model(lines))
    bottom = figure.axes[2]
    left, predicted, _ = bottom.lines
    # stations 300 m apart along a line due north
    np.testing.assert_allclose(np.asarray(left.get_xdata()), [0.0, 0.3, 0.6, 0.9], atol=1e-9)
    np.testing.assert_array_equal(left.get_ydata(), [6.0, 12.0, 18.0, 24.0])
    np.testing.assert_allclose(np.asarray(predicted.get_ydata()), [3.0, 6.0, 9.0, 12.0])
    told = texts(figure)
    assert {"reduced zz", "predicted by the bodies", "predicted by the voxels"} <= set(told)
    assert {"motion", "terrain", "distance along L000, km"} <= set(told)


def test_the_histogram_counts_residuals_over_their_deviation() -> None:
    lines = ledger_lines()
    figure = figures.residual_histograms(lines, None, fitted_model(lines))
    # residuals 3 n over 4 at n = 1, 2, 3: 0.75, 1.5, 2.25, a third each in steps of 0.2
    step = figure.axes[0].lines[0]
    x, y = np.asarray(step.get_xdata()), np.asarray(step.get_ydata())
    np.testing.assert_allclose(x[y > 0.0], [0.7, 1.5, 2.3], atol=1e-12)
    np.testing.assert_allclose(y[y > 0.0], 1.0 / (3.0 * 0.2), rtol=1e-12)


def test_the_sections_go_through_the_strongest_cell() -> None:
    figure = figures.model_sections(model_of())
    told = "\n".join(texts(figure))
    # the last of 24 cells holds 120 kg/m3
    assert "layer 2, near height -75 m" in told
    assert f"section at northing {(NORTH + 200.0) / 1e3:.2f} km" in told
    assert f"section at easting {(EAST + 300.0) / 1e3:.2f} km" in told
    assert "density contrast, kg/m3" in told
    low, high = figure.axes[0].images[0].get_clim()
    assert low == -high


def test_boxes_hold_their_bodies() -> None:
    low, high = figures.body_box(
        "sphere", {"easting": 10.0, "northing": 20.0, "height": -30.0, "radius": 5.0}
    )
    np.testing.assert_array_equal([low, high], [[5.0, 15.0, -35.0], [15.0, 25.0, -25.0]])
    prism = {"easting": 0.0, "northing": 100.0, "top": -10.0, "width": 4.0, "length": 8.0}
    low, high = figures.body_box("prism", {**prism, "extent": 30.0})
    np.testing.assert_array_equal([low, high], [[-2.0, 96.0, -40.0], [2.0, 104.0, -10.0]])
    sheet = {"easting": 0.0, "northing": 0.0, "top": -50.0, "strike": 0.0, "dip": 90.0}
    low, high = figures.body_box(
        "sheet", {**sheet, "length": 200.0, "extent": 80.0, "thickness": 6.0}
    )
    corners, _ = dipping_sheet(0.0, 0.0, -50.0, 0.0, 90.0, 200.0, 80.0, 6.0)
    np.testing.assert_array_equal([low, high], [corners.min(axis=0), corners.max(axis=0)])
    # upright and striking north: closed form, rounding of cos 90° alone
    np.testing.assert_allclose([low, high], [[-3, -100, -130], [3, 100, -50]], atol=1e-9)


def test_attributes_are_said_in_four_digits() -> None:
    assert said(1234.5678) == "1235"
    assert said([0.00012345, 2.0]) == "0.0001234  2"
    assert said(7) == "7"
    assert said(["a", "b"]) == "a  b"
    assert said("low-pass") == "low-pass"


def test_equal_runs_give_equal_pages() -> None:
    first, second = (page_of({"lines": ledger_lines()}, BRIEF) for _ in range(2))
    assert first == second


def test_another_part_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError) as caught:
        write_report(PLAIN, tmp_path, lines=grid_of())
    assert str(caught.value) == (
        "SurveyError: this is the part 'grid', not 'lines'\n"
        "  where: going into stage write_report\n"
        "  cure:  hand over the lines"
    )
    assert not list(tmp_path.iterdir())
