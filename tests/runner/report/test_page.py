"""The page as a reader, a browser and a spreadsheet see it."""

import csv
import html.parser
import json
import re

import numpy as np
import pytest
from PIL import Image

from runner.errors import InputError
from runner.record import open_run
from runner.report import write_report

VOID = {"meta", "br", "hr", "img", "link", "input"}


class Reader(html.parser.HTMLParser):
    """Collects text and every address; complains about a tag that is not closed in its turn."""

    def __init__(self):
        super().__init__(convert_charrefs=True)
        self.open, self.text, self.addresses, self.ids, self.faults = [], [], [], [], []

    def handle_starttag(self, tag, attrs):
        self._attributes(attrs)
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self._attributes(attrs)

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.faults.append(f"{self.getpos()}: </{tag}> closes nothing")

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text.append(data)

    def _attributes(self, attrs):
        for name, value in attrs:
            if name in ("src", "href", "data", "srcset", "action", "xlink:href"):
                self.addresses.append(value)
            if name == "id":
                self.ids.append(value)


def read(page):
    reader = Reader()
    reader.feed(page.read_text(encoding="utf-8"))
    reader.close()
    return reader


def words(page):
    text = " ".join(" ".join(read(page).text).split())
    return text.replace("\N{NO-BREAK SPACE}", " ")


def rows(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture
def coarse(monkeypatch):
    """PNG files of few dots, for tests that read words only."""
    monkeypatch.setattr("runner.report.picture.PNG_DPI", 30)


# ------------------------------------------------------------------ one run


def test_the_page_is_well_formed_and_identifiers_are_unique(report):
    reader = read(report / "index.html")
    assert reader.faults == []
    assert reader.open == []
    assert len(set(reader.ids)) == len(reader.ids)


def test_the_page_needs_nothing_from_outside(report):
    """Addresses lead inside the page or to the files beside it; the style asks for nothing."""
    page = report / "index.html"
    for address in read(page).addresses:
        assert address.startswith("#") or (report / address).is_file(), address
    text = page.read_text(encoding="utf-8")
    for forbidden in ("http://", "https://", "//cdn", "@import", "<script", "<link", "<img"):
        assert forbidden not in text
    assert re.findall(r"url\((?!#)[^)]*\)", text) == []


def test_links_inside_the_page_lead_somewhere(report):
    reader = read(report / "index.html")
    assert {a[1:] for a in reader.addresses if a.startswith("#")} <= set(reader.ids)


def test_the_answer_comes_before_the_explanations(report):
    text = words(report / "index.html")
    assert text.index("is lowest at 125.1 °C") < text.index("What was tested, and how")
    assert text.index("Saturation current of DRUM-22-A (A), pulse method") < text.index(
        "What was tested, and how"
    )


@pytest.mark.parametrize(
    "needed",
    [
        "DRUM-22-A", "10 % drop", "20 % drop", "30 % drop", "not reached", "14 % above the rated 6 A",
        "Differential inductance", "incremental inductance", "counted from the initial value at the same temperature",
        "22 µH nominal", "rated 6 A", "18 mΩ at 20 °C", "−40 °C, 25 °C and 125 °C", "within 1 K",
        "width at 6 values from 2 µs to 20 µs", "up and down again",
        "no safety device", "stays charged", "burn", "pacemakers", "rules of the place",
        "clipped", "voltage channel above 11.8 V; raise its range", "2 (−40 °C, 5.6 µs)",
        "lcr: no reply to 'READ?' in 2.0 s; the connection was opened again. (and 1 more alike)", "instrument lost",
        "Mock bench", "Digitizer 2", "0007", "1.4", "12 ns", "0.05 %",
        "20 ppm/K", "2026-03-02", "C-17", "kneemap 0.1.0", "numpy 2.4.6",
        "1e0e8ac2-0000-4000-8000-000000000001",
        "width: {from: 2 us, to: 20 us, count: 6} # climbed from the shortest", "# a comment with ümlauts & <angles>",
        "-39.9".replace("-", "−"), "25.1", "125.1",
    ],
)  # fmt: skip
def test_the_page_says(report, needed):
    assert needed in words(report / "index.html")


def test_the_ordinary_course_of_the_night_is_not_among_the_events(report):
    assert "Ordinary course" not in words(report / "index.html")


def test_the_page_tells_no_path_of_the_machine(report):
    assert "private" not in (report / "index.html").read_text(encoding="utf-8")


def test_every_picture_has_a_png_and_a_csv(report):
    names = {path.stem for path in report.glob("*.png")}
    assert names == {path.stem for path in report.glob("*.csv")}
    assert names == {
        "night", "part_00_saturation", "part_00_resistance", "part_00_captures",
        "part_00_pulse_curves", "part_00_pulse_surface", "part_00_bias_curves", "part_00_bias_surface",
    }  # fmt: skip
    assert names <= set(read(report / "index.html").ids)
    for path in report.glob("*.png"):
        with Image.open(path) as image:
            image.load()
            assert image.width == 1420  # 7.1 inch at 200 dots an inch


def test_the_csv_of_the_saturation_current_is_the_result(report):
    result = json.loads((report.parent / "result.json").read_text(encoding="utf-8"))
    expected = {
        (method, round(row["temperature_degC"], 6), row["drop"]): row
        for method, values in result["parts"][0]["methods"].items()
        for row in values["saturation_current"]
    }
    written = rows(report / "part_00_saturation.csv")
    assert len(written) == len(expected)
    for row in written:
        original = expected[row["method"], round(float(row["temperature_degC"]), 6), float(row["drop_1"])]
        assert row["status"] == original["status"]
        for name, key in (("saturation_current_A", "ampere"), ("low_A", "low"), ("high_A", "high")):
            if original[key] is None:
                assert row[name] == ""
            else:
                assert float(row[name]) == pytest.approx(original[key], rel=1e-8)


@pytest.mark.parametrize("method", ["pulse", "bias"])
def test_the_csv_of_the_curves_is_the_surface(report, method):
    with open_run(report.parent) as run:
        surface = next(s for s in run.extraction.surfaces if s.method == method)
    written = rows(report / f"part_00_{method}_curves.csv")
    assert len(written) == np.isfinite(surface.inductance).sum()
    measured = surface.inductance[np.isfinite(surface.inductance)]
    assert [float(row["inductance_H"]) for row in written] == pytest.approx(measured.tolist(), rel=1e-8)
    assert {float(row["temperature_degC"]) for row in written} == set(surface.temperature_degC.tolist())


def test_the_csv_of_the_captures_holds_samples_of_the_record(report):
    written = rows(report / "part_00_captures.csv")
    with open_run(report.parent) as run:
        for point in {int(row["point"]) for row in written}:
            captures = run.captures(point)
            mine = [row for row in written if int(row["point"]) == point]
            at = np.searchsorted(captures.time, [float(row["time_s"]) - 1e-12 for row in mine])
            assert captures.current[0][at] == pytest.approx(
                [float(row["current_A"]) for row in mine], abs=1e-6
            )
            assert captures.voltage[0][at] == pytest.approx(
                [float(row["voltage_V"]) for row in mine], abs=1e-6
            )


def test_the_csv_of_the_night_has_air_part_and_set_points(report):
    written = rows(report / "night.csv")
    assert {row["what"] for row in written} == {"air", "part", "set-point"}
    set_points = [float(row["temperature_degC"]) for row in written if row["what"] == "set-point"]
    assert set_points == [-40, -40, 25, 25, 125, 125]
    times = [float(row["time_since_start_s"]) for row in written if row["what"] == "air"]
    assert times == sorted(times)
    assert times[0] == pytest.approx(60, abs=0.01)


def test_units_stand_in_the_header_of_every_csv(report):
    units = {"A", "H", "ohm", "s", "V", "degC", "1"}
    words_only = {"method", "reference", "status", "what", "point", "part"}
    for path in report.glob("*.csv"):
        header = path.read_text(encoding="utf-8").splitlines()[0].split(",")
        assert all(name in words_only or name.rsplit("_", 1)[1] in units for name in header), (path, header)


@pytest.mark.usefixtures("coarse")
def test_writing_again_gives_the_same_bytes(make_run):
    folder = make_run(methods=("pulse",), temperatures=(25.0, 85.0))
    first = {path.name: path.read_bytes() for path in write_report(folder).parent.iterdir()}
    second = {path.name: path.read_bytes() for path in write_report(folder).parent.iterdir()}
    assert first == second


@pytest.mark.usefixtures("coarse")
def test_an_earlier_report_leaves_no_pictures_behind_and_other_files_stay(make_run):
    folder = make_run(methods=("pulse",), temperatures=(25.0,))
    into = folder / "report"
    into.mkdir()
    for name in ("part_07_bias_curves.png", "together_saturation.csv", "my_notes.csv", "night_shift.png"):
        (into / name).write_text("old", encoding="utf-8")
    write_report(folder)
    kept = {path.name for path in into.iterdir() if path.read_bytes() == b"old"}
    assert kept == {"my_notes.csv", "night_shift.png"}


# ------------------------------------------------------- what may be missing


@pytest.mark.parametrize(
    ("what", "needed", "absent"),
    [
        ({"methods": ("bias",)}, ["incremental inductance"], ["Raw captures", "Differential inductance of"]),
        ({"methods": ("pulse",)}, ["differential inductance", "Raw captures"], ["Incremental inductance of"]),
        (
            {"extracted": False},
            ["Not extracted yet.", "'kneemap extract'", "no saturation current was extracted", "Raw captures",
             "A digitizer channel reached the end of its range"],
            ["This run is not complete."],
        ),
        (
            {"state": "stopped", "extracted": False},
            ["This run is not complete.", "Its state is 'stopped'; 51 points are recorded."],
            [],
        ),
        (
            {"state": "acquiring", "points": False, "extracted": False, "events": False},
            ["This run is not complete.", "No points.", "No temperatures over time were recorded."],
            ["Not extracted yet.", "Raw captures"],
        ),
        (
            {"kind": "captures", "methods": ("pulse",), "temperatures": (25.0,), "events": False},
            ["Captures taken by hand", "No temperatures over time were recorded.", "No instruments are recorded.",
             "6 taken by hand", "one temperature was measured",
             "Raw captures of DRUM-22-A"],
            ["lasting", "Bias method", "Legs"],
        ),
        ({"temperatures": (25.0,)}, ["one temperature was measured"], []),
        ({"change": lambda result: result["parts"].clear()}, ["no saturation current was extracted"], []),
    ],
    ids=["bias only", "pulse only", "not extracted", "stopped", "no points", "by hand", "one leg", "empty result"],
)  # fmt: skip
@pytest.mark.usefixtures("coarse")
def test_what_is_missing_is_said_or_left_out(make_run, what, needed, absent):
    page = write_report(make_run(**what))
    reader = read(page)
    assert (reader.faults, reader.open) == ([], [])
    text = words(page)
    for sentence in needed:
        assert sentence in text
    for sentence in absent:
        assert sentence not in text


@pytest.mark.usefixtures("coarse")
def test_trouble_stands_on_top(make_run):
    text = words(write_report(make_run(state="stopped", methods=("pulse",), temperatures=(25.0,))))
    assert text.index("This run is not complete.") < text.index("DRUM-22-A")


@pytest.mark.usefixtures("coarse")
def test_numbers_that_are_null_do_not_stop_the_report(make_run):
    def lose(result):
        for values in result["parts"][0]["methods"].values():
            for rows_ in values.values():
                for row in rows_:
                    row["low"] = row["high"] = None
            values["initial_inductance"][0]["henry"] = None
            values["saturation_current"][0].update(ampere=None, status="not reached")

    assert "not reached" in words(write_report(make_run(change=lose, temperatures=(25.0, 85.0))))


@pytest.mark.usefixtures("coarse")
def test_a_status_is_shown_under_its_own_name(make_run):
    def doubt(result):
        row = result["parts"][0]["methods"]["pulse"]["saturation_current"][2]
        row.update(ampere=None, high=None, status="two plateaus")

    assert "two plateaus" in words(
        write_report(make_run(change=doubt, methods=("pulse",), temperatures=(25.0,)))
    )


@pytest.mark.usefixtures("coarse")
def test_methods_that_disagree_are_said_on_top(make_run):
    def disagree(result):
        result["parts"][0]["cross_check"] = [
            {"temperature_degC": 25.1, "text": "L_0 differs by 10 %.", "agrees": False},
            {"temperature_degC": 85.1, "text": "Agrees at 85 °C.", "agrees": True},
        ]

    text = words(write_report(make_run(change=disagree, temperatures=(25.0,))))
    assert text.index(
        "The two methods disagree about DRUM-22-A. At 25 °C, L_0 differs by 10 %."
    ) < text.index("What was tested, and")
    assert "The two methods compared" in text
    assert "Agrees at 85 °C." in text


# ------------------------------------------------------------- several parts

NASTY = "<script>alert('x')</script> & \"Größe\" µ/$x_1$ {{ 7*7 }}"


@pytest.mark.usefixtures("coarse")
def test_several_parts_stand_alone_and_together(make_run):
    page = write_report(
        make_run(labels=("DRUM-A", "DRUM-B", "TOROID"), methods=("pulse",), temperatures=(25.0, 125.0))
    )
    text = words(page)
    for label in ("DRUM-A", "DRUM-B", "TOROID"):
        assert f"Saturation current of {label} (A), pulse method" in text
        assert f"{label}: the saturation current (30 % drop" in text
    assert "Lowest saturation current of each part, 30 % drop" in text
    assert text.index("Lowest saturation current") < text.index("What was tested, and how")
    together = rows(page.parent / "together_saturation.csv")
    assert {row["part"] for row in together} == {"DRUM-A", "DRUM-B", "TOROID"}
    assert (page.parent / "part_02_pulse_curves.png").is_file()
    night = {row["what"] for row in rows(page.parent / "night.csv")}
    assert night == {"air", "DRUM-A", "DRUM-B", "TOROID", "set-point"}


@pytest.mark.usefixtures("coarse")
def test_a_nasty_label_is_text_and_nothing_else(make_run):
    page = write_report(
        make_run(labels=(NASTY, "B"), methods=("pulse",), temperatures=(25.0, 125.0), title=NASTY)
    )
    raw = page.read_text(encoding="utf-8")
    assert "<script" not in raw
    assert NASTY in " ".join(read(page).text)
    assert "49" not in re.findall(r"<h2[^>]*>(.*?)</h2>", raw)[1]
    reader = read(page)
    assert (reader.faults, reader.open) == ([], [])
    assert {row["part"] for row in rows(page.parent / "together_saturation.csv")} == {NASTY, "B"}


def test_a_folder_that_is_no_run_is_refused(tmp_path):
    with pytest.raises(InputError):
        write_report(tmp_path)
    assert list(tmp_path.iterdir()) == []
