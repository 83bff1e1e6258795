"""Pictures as files: SVG that can stand in a page, PNG of the right size, CSV that reads back."""

import csv
import io
import math

import numpy as np
import pytest
from PIL import Image

from runner.report import look
from runner.report.captures import thin
from runner.report.picture import PNG_DPI, Picture, Sheet, csv_text, inline_svg, save


def _picture(name="sine"):
    with look.settings():
        figure, (axes,) = look.new_figure(2.0)
        axes.plot([0, 1, 2], [0, 1, 0], "o-", label="a")
        axes.fill_between([0, 1, 2], [0, 0.9, 0], [0, 1.1, 0], alpha=0.3)
        return Picture(
            name, "A caption.", figure, Sheet(("time_s", "current_A"), [(0.0, 1.0), (1.0, math.nan)])
        )


def test_the_svg_is_one_element_with_nothing_from_outside(tmp_path):
    with look.settings():
        svg = save(_picture(), tmp_path).svg
    assert svg.startswith("<svg")
    assert svg.endswith("</svg>")
    assert svg.count("<svg") == 1
    for forbidden in ("http", "xmlns", "<metadata", "<!--", "<?xml", "DOCTYPE", "Date"):
        assert forbidden not in svg
    assert 'viewBox="' in svg.split(">", 1)[0]
    assert ' width="' not in svg.split(">", 1)[0]


def test_identifiers_carry_the_name_of_their_picture(tmp_path):
    with look.settings():
        svg = save(_picture("sine"), tmp_path).svg
    import re

    defined = re.findall(r'\bid="([^"]+)"', svg)
    used = re.findall(r'href="#([^"]+)"', svg) + re.findall(r"url\(#([^)]+)\)", svg)
    assert defined
    assert used
    assert len(set(defined)) == len(defined)
    assert all(name.startswith("sine-") for name in defined)
    assert set(used) <= set(defined)


def test_the_same_picture_gives_the_same_bytes(tmp_path):
    for folder in ("a", "b"):
        (tmp_path / folder).mkdir()
    with look.settings():
        first, second = save(_picture(), tmp_path / "a"), save(_picture(), tmp_path / "b")
    assert first.svg == second.svg
    for name in ("sine.png", "sine.csv"):
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()


def test_the_png_has_200_dots_an_inch(tmp_path):
    with look.settings():
        save(_picture(), tmp_path)
    with Image.open(tmp_path / "sine.png") as image:
        image.load()
        assert image.size == (round(look.WIDTH * PNG_DPI), round(2.0 * PNG_DPI))
        assert PNG_DPI == 200


def test_a_sheet_reads_back_and_an_unknown_number_is_an_empty_field():
    text = csv_text(
        Sheet(("what", "temperature_degC", "n"), [('a "quoted", name', 25.123456789, 3), ("b", math.nan, 4)])
    )
    rows = list(csv.DictReader(io.StringIO(text, newline="")))
    assert rows[0] == {"what": 'a "quoted", name', "temperature_degC": "25.1234568", "n": "3"}
    assert rows[1]["temperature_degC"] == ""


def test_an_svg_document_with_other_order_of_attributes_is_taken_too():
    svg = inline_svg(
        '<?xml version="1.0"?>\n<svg xmlns="http://x" height="3pt" width="4pt" viewBox="0 0 4 3"></svg>\n',
        "p",
    )
    assert svg == '<svg viewBox="0 0 4 3"></svg>'


@pytest.mark.parametrize("samples", [1, 50, 360, 361, 20_000])
def test_thinning_keeps_ends_and_extremes(samples):
    rng = np.random.default_rng(7)
    voltage, current = rng.normal(size=samples), rng.normal(size=samples)
    voltage[samples // 3] = 50.0  # a spike of one sample
    current[samples // 2] = -50.0
    kept = thin(voltage, current)
    assert kept.size <= min(samples, 4 * 90 + 2)
    assert kept[0] == 0
    assert kept[-1] == samples - 1
    assert np.all(np.diff(kept) > 0)
    assert voltage[kept].max() == 50.0
    assert current[kept].min() == -50.0
