import pytest


@pytest.fixture
def bars(accuracy_report):
    return accuracy_report.Bars(
        error={"12 bit": (0.002, 0.006), "8 bit": (0.005, 0.015)},
        coverage=(0.92, 0.98),
        claimed=0.95,
        efficiency=2.0,
        factor=2.0,
    )


def entry(error, u=1e-3):
    return {"error": error, "u": u, "own": u / 2, "held": abs(error) <= 2 * u}


def bench(seed, *errors, law="gapped", bits=12):
    """A bench whose Isat at 30 % is off by these at cold, room and hot; None where it was not found."""
    rows = [
        {
            "place": place,
            "fit": "limiter",
            "misfit": 1.01,
            "30": None if error is None else entry(error),
            "20": entry(1e-4),
            "10": entry(2e-4),
            "L0": entry(3e-4),
        }
        for place, error in zip(("cold", "room", "hot"), errors, strict=True)
    ]
    return {
        "seed": seed,
        "law": law,
        "bits": bits,
        "longest": 30e-6,
        "shunt_time": 0.25e-6,
        "rail": 12.5,
        "rows": rows,
    }


@pytest.fixture
def result(accuracy):
    """Two benches of 12 bit, one of 8 bit, one harsh; four errors of 12 bit inside their interval of 0.2 %, one out."""
    fine = [bench(1, 0.0004, -0.0008, None), bench(2, 0.001, 0.0012, -0.0031, law="erf")]
    coarse = [bench(3, 0.0041, 0.0001, 0.0001, bits=8)]
    harsh = [bench(4, 0.05, 0.05, 0.05, law="powder", bits=10)]
    efficiency = [
        {
            "part": "gapped",
            "trials": 50,
            "bound": 2.5e-5,
            "rms": 4e-5,
            "ratio": 1.6,
            "claimed": 4e-5,
            "bias": 0,
        }
    ]
    return {
        "12 bit": accuracy.summarise(fine),
        "8 bit": accuracy.summarise(coarse),
        "harsh": accuracy.summarise(harsh),
        "efficiency": efficiency,
        "benches": fine + coarse + harsh,
    }


def rows_of(page, heading):
    """The cells of the rows of the first table below a heading."""
    below = page.split(f"## {heading}\n", 1)[1].split("\n## ", 1)[0]
    lines = [line for line in below.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[2:]]


def test_the_page_gives_each_bar_with_what_was_found(accuracy_report, bars, result):
    page, _ = accuracy_report.draw_report(result, bars, ["12 bit: something"])
    assert "**Not kept:**\n\n- 12 bit: something" in page
    rows = {row[0]: row[1:] for row in rows_of(page, "Bars")}
    # The median of 0.04, 0.08, 0.10, 0.12 and 0.31 %; one of two intervals at "hot" was not found, the other missed.
    assert rows["12 bit: Isat at 30 %, median"] == ["0.100%", "at most 0.2%"]
    assert rows["12 bit: coverage, cold"] == ["100.0%", "92% to 98%"]
    assert rows["12 bit: coverage, hot"] == ["0.0%", "92% to 98%"]
    assert rows["12 bit: legs without an Isat that was within reach"] == ["1", "0"]
    assert rows["efficiency, gapped"] == ["1.60", "at most 2"]
    assert not [name for name in rows if name.startswith("harsh")]
    clean, _ = accuracy_report.draw_report(result, bars, [])
    assert "**Every bar is kept.**" in clean


def test_coverage_stands_with_what_chance_gives_it(accuracy_report, bars, result):
    page, _ = accuracy_report.draw_report(result, bars, [])
    rows = {(row[0], row[1]): row[2:] for row in rows_of(page, "Coverage")}
    # sqrt(0.95·0.05/2) = 15.4 %, sqrt(0.95·0.05/1) = 21.8 %: the one bench whose Isat was found at "hot" counts alone.
    assert rows["12 bit", "Isat at 30 %"] == ["100.0% ± 15.4%", "100.0% ± 15.4%", "0.0% ± 21.8%"]


def test_a_law_and_the_harsh_family_have_rows_of_their_own(accuracy_report, bars, result):
    page, _ = accuracy_report.draw_report(result, bars, [])
    laws = {row[0]: row for row in rows_of(page, "By law")}
    assert set(laws) == {"12 bit: erf", "12 bit: gapped", "12 bit: all", "8 bit: gapped", "8 bit: all"}
    assert laws["12 bit: erf"][4:6] == ["0.310%", "66.7% ± 21.8%"]
    assert [row[0] for row in rows_of(page, "Harsh benches")] == ["harsh: powder", "harsh: all"]


def test_the_worst_benches_come_first_with_their_facts(accuracy_report, bars, result):
    page, _ = accuracy_report.draw_report(result, bars, [])
    worst = rows_of(page, "The 10 benches with the largest errors")
    assert [row[0] for row in worst] == ["3, 8 bit", "2, 12 bit", "1, 12 bit"]
    assert worst[1][1:9] == ["erf", "hot", "-0.310%", "0.200%", "-1.55", "30.0 us", "0.25 us", "12.5 V"]


def test_the_figure_shows_every_error_once_in_each_half(accuracy_report, bars, result):
    _, figure = accuracy_report.draw_report(result, bars, [])
    for axes in figure.axes:
        dots = [line for line in axes.lines if line.get_marker() == "."]
        assert sum(len(line.get_xdata()) for line in dots) == 11
    over = [y for line in figure.axes[0].lines if line.get_marker() == "." for y in line.get_ydata()]
    assert min(over) == pytest.approx(-0.0031 / 0.002)


def test_benches_that_do_not_add_up_to_the_summaries_are_refused(accuracy_report, bars, result):
    result["benches"].pop()
    with pytest.raises(ValueError, match="not as many"):
        accuracy_report.draw_report(result, bars, [])
