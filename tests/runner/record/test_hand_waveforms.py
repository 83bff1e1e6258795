import numpy as np
import pytest

from runner.errors import InputError
from runner.record.hand_waveforms import read_waveform

NAMES = {"time": "t", "voltage": "v_part", "current": "v_shunt"}
STEP = 1e-8


def lines(count=20, **changes):
    rows = [f"{i * STEP:.9e},{12 - i * 0.01},{i * 0.001}" for i in range(count)]
    for index, text in changes.items():
        rows[int(index[1:])] = text
    return rows


def write(path, rows, header="t,v_part,v_shunt", comment="# scope at bench 2\n"):
    path.write_text(comment + header + "\n" + "\n".join(rows) + "\n", encoding="utf-8")
    return path


def test_columns_are_found_by_name_in_any_order_and_comments_are_passed_over(tmp_path):
    rows = [f"{i * 0.001},{i * STEP:.9e},{12.0}" for i in range(20)]
    wave = read_waveform(write(tmp_path / "a.csv", rows, header=" v_shunt, t ,v_part"), **NAMES)
    assert wave.interval == pytest.approx(STEP, rel=1e-12)
    assert wave.first == 0.0
    assert wave.voltage.tolist() == [12.0] * 20
    assert wave.current[3] == 0.003


def test_an_npz_gives_the_same_waveform_as_the_csv(tmp_path):
    t = np.arange(32) * STEP - 5e-8
    np.savez(tmp_path / "a.npz", t=t, v_part=np.sin(t), v_shunt=np.cos(t))
    wave = read_waveform(tmp_path / "a.npz", **NAMES)
    assert wave.first == -5e-8
    np.testing.assert_array_equal(wave.voltage, np.sin(t))


def test_a_time_column_rounded_to_few_digits_is_accepted(tmp_path):
    rows = [f"{i * 1e-8:.3e},1,1" for i in range(100, 400)]  # 1.234e-06: four digits of a 10 ns step
    assert read_waveform(write(tmp_path / "a.csv", rows), **NAMES).interval == pytest.approx(1e-8, rel=1e-3)


@pytest.mark.parametrize(
    ("rows", "header", "line", "words"),
    [
        (lines(), "t,v_part,i", 2, ("no column 'v_shunt'", "t, v_part, i", "columns:")),
        (lines(_5="4e-8,12,0"), "t,v_part,v_shunt", 8, ("time does not increase", "export again")),
        (lines(_5="1.9e-8,12,0"), "t,v_part,v_shunt", 8, ("time does not increase",)),
        (lines(_5="5.6e-8,12,0"), "t,v_part,v_shunt", 8, ("not evenly spaced",)),
        (lines(_7="7e-8,nan,0"), "t,v_part,v_shunt", 10, ("v_part: sample 7 is nan", "mend")),
        (lines(_7="7e-8,12,inf"), "t,v_part,v_shunt", 10, ("v_shunt: sample 7 is inf",)),
        (lines(_7="7e-8,12"), "t,v_part,v_shunt", 10, ("2 values, the header 3",)),
        (lines(_7="7e-8,twelve,0"), "t,v_part,v_shunt", 10, ("'twelve' is no number",)),
    ],
)
def test_what_is_wrong_is_named_with_its_line(tmp_path, rows, header, line, words):
    path = write(tmp_path / "bad.csv", rows, header=header)
    with pytest.raises(InputError) as caught:
        read_waveform(path, **NAMES)
    message = str(caught.value)
    assert message.startswith(f"{path}:{line}: ")
    for word in words:
        assert word in message


def test_other_faults_name_the_file(tmp_path):
    binary = tmp_path / "binary.csv"
    binary.write_bytes(b"\xff\xfe\x00\x01")
    not_npz = tmp_path / "text.npz"
    not_npz.write_text("t,v\n")
    uneven = tmp_path / "uneven.npz"
    np.savez(uneven, t=np.arange(20.0), v_part=np.zeros(20), v_shunt=np.zeros(19))
    empty = write(tmp_path / "short.csv", lines(3))
    for path, word in [
        (tmp_path / "absent.csv", "cannot be read"),
        (tmp_path / "absent.npz", "cannot be read"),
        (binary, "no UTF-8 text"),
        (not_npz, "no NPZ file"),
        (uneven, "one length"),
        (empty, "too few"),
    ]:
        with pytest.raises(InputError) as caught:
            read_waveform(path, **NAMES)
        assert str(path) in str(caught.value)
        assert word in str(caught.value)
