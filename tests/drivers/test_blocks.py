import io
import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.blocks import NotABlock, bytes_per_sample, decode_samples, take_block


def exactly(data: bytes):
    """A reader over bytes that fails like a session when they run out."""
    stream = io.BytesIO(data)

    def read(count: int) -> bytes:
        taken = stream.read(count)
        if len(taken) < count:
            raise EOFError(f"{count} bytes wanted, {len(taken)} there")
        return taken

    return read


@pytest.mark.parametrize(
    ("wire", "data"),
    [
        (b"#15hallo", b"hallo"),  # instrument manual's example of IEEE 488.2-1992, 7.7.6
        (b"#216" + bytes(range(16)) + b"\n", bytes(range(16))),  # the same, two length digits, NL behind
        (b"#516000" + b"\0" * 16000, b"\0" * 16000),  # 4000 float32 samples are 16000 bytes
        (b"#9000000002ab", b"ab"),  # nine digits are the most there can be
        (b"#10", b""),
        (b"#14\n\n;#", b"\n\n;#"),  # terminators and separators are data like any other
    ],
)
def test_a_definite_block_gives_its_bytes(wire: bytes, data: bytes) -> None:
    assert take_block(exactly(wire)) == data


@pytest.mark.parametrize(
    ("wire", "said"),
    [
        (b"-161,", "begins with"),  # SCPI-1999 vol. 2, 21.8: -161 is what an instrument says of such a block
        (b"#x12ab", "begins with"),  # non-digit after '#'
        (b"#2a2ab", "made of digits"),
        (b"##12ab", "begins with"),
        (b"#0ab\n", "indefinite"),
    ],
)
def test_what_is_no_block_is_said_so_with_what_came(wire: bytes, said: str) -> None:
    with pytest.raises(NotABlock, match=said) as caught:
        take_block(exactly(wire))
    assert wire.startswith(caught.value.began)


def test_a_block_that_ends_early_is_left_to_the_reader_to_refuse() -> None:
    with pytest.raises(EOFError):
        take_block(exactly(b"#15hal"))


def test_a_block_of_indefinite_length_is_read_by_count() -> None:
    # IEEE 488.2: '#0', data that may hold NL, then NL with END. A socket has no END, so the count has to be known.
    read = exactly(b"#0a\nb\n")
    assert take_block(read, expected_bytes=3) == b"a\nb"
    assert read(1) == b"\n"


@pytest.mark.parametrize(
    ("encoding", "order", "code"),
    [
        ("int16", "big", ">h"),  # FORMat:BORDer NORMal: most significant byte first
        ("int16", "little", "<h"),  # SWAPped
        ("int32", "big", ">i"),
        ("int32", "little", "<i"),
        ("real32", "big", ">f"),
        ("real32", "little", "<f"),
    ],
)
def test_samples_agree_with_the_standard_library(encoding, order, code) -> None:
    numbers = [0, 1, -1, 258, -32768, 32767]
    wire = b"".join(struct.pack(code, number) for number in numbers)
    decoded = decode_samples(wire, encoding, order)
    assert decoded.tolist() == numbers
    assert decoded.dtype.isnative
    assert bytes_per_sample(encoding) == struct.calcsize(code)


def test_an_ascii_list_is_numbers_with_commas() -> None:
    assert decode_samples(b"1.5,-2E-3, +4", "ascii", "big").tolist() == [1.5, -2e-3, 4.0]
    assert bytes_per_sample("ascii") is None


@pytest.mark.parametrize(
    ("data", "encoding"),
    [(b"abc", "int16"), (b"abcde", "int32"), (b"1,,2", "ascii"), (b"", "ascii"), (b"1;2", "ascii")],
)
def test_bytes_that_are_no_samples_are_refused(data: bytes, encoding) -> None:
    with pytest.raises(ValueError):  # noqa: PT011  # numpy's and Python's own words vary
        decode_samples(data, encoding, "big")


@given(st.lists(st.integers(-32768, 32767)), st.sampled_from(["big", "little"]))
def test_blocks_made_by_numpy_come_back_whole(codes: list[int], order) -> None:
    data = np.array(codes, dtype=">i2" if order == "big" else "<i2").tobytes()
    length = str(len(data))
    taken = take_block(exactly(f"#{len(length)}{length}".encode() + data))
    assert decode_samples(taken, "int16", order).tolist() == codes
