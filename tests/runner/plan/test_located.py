"""YAML with places: what is not readable as a plan at all becomes one located message."""

from pathlib import Path

import pytest

from runner.errors import InputError
from runner.plan.located import Document, dotted, read_bytes, read_document


@pytest.mark.parametrize(
    ("data", "where", "says"),
    [
        (b"", "f:1:1", "the file is empty"),
        (b"# only a comment\n", "f:1:1", "the file is empty"),
        (b"- a\n- b\n", "f:1:1", "a list where 'key: value' lines are expected"),
        (b"just words\n", "f:1:1", "a single value where 'key: value' lines are expected"),
        (b"title: caf\xe9\n", "f:1:11", "byte 0xE9 is no UTF-8 text; save the file as UTF-8"),
        (b"a: 1\nb: \xff\n", "f:2:4", "byte 0xFF is no UTF-8 text"),
        (b"a: 1\nb: x\x00y\n", "f:2:5", "may not stand in YAML"),
        (b"a: [1, 2\nb: 3\n", "f:2:2", "that begins in line 1"),
        (b"a: 'open\nb: 3\n", "f:3:1", "not readable as YAML"),
        (b"a: 1\n\tb: 2\n", "f:2:1", "a tab stands where spaces are expected"),
        (b"a: 1\n b: 2\n", "f:2:3", "not readable as YAML"),
        (b"a: 1\n---\nb: 2\n", "f:2:1", "a second document begins here"),
        (
            b"a: 1\nb: 2\na: 3\n",
            "f:3:1: a",
            "the key 'a' stands twice here (first in line 1); keep one of them",
        ),
        (b"p: {a: 1, a: 2}\n", "f:1:11: p.a", "stands twice"),
        (b"p:\n- a: 1\n  a: 2\n", "f:3:3: p[0].a", "stands twice"),
        (
            b"a: &a {b: 1}\nc: {<<: *a}\n",
            "f:2:5: c",
            "merge keys ('<<') are not read here; write the keys out",
        ),
        (b"a: &a [*a]\n", "f:1:4: a[0]", "contains itself"),
        (b"[1, 2]: 3\n", "f:1:1", "a key must be a single word"),
        (b"a: !secret x\n", "f:1:4: a", "could not determine a constructor for the tag '!secret'"),
        (b"a: 2026-13-45\n", "f:1:4: a", "write plain text, a number or a date such as 2026-03-02"),
        (b"[" * 3000, "f", "nested too deeply"),
    ],
)
def test_what_is_no_plan_is_one_located_message(data: bytes, where: str, says: str) -> None:
    with pytest.raises(InputError) as caught:
        read_document(data, "f")
    assert caught.value.faults[0].where == where
    assert says in caught.value.faults[0].what
    assert len(caught.value.faults) == 1


def test_a_small_file_that_unfolds_into_a_huge_one_is_refused() -> None:
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 10)}]" for n in range(1, 8)]
    with pytest.raises(InputError, match="unfolds into too many values"):
        read_document("\n".join(lines).encode(), "f")


def test_values_and_places_of_nested_lists_and_mappings() -> None:
    document = read_document(b"top:\n  list: [1, {deep: 2 us}]\non: yes\n3: x\n", "f")
    assert document.value == {"top": {"list": [1, {"deep": "2 us"}]}, "on": True, 3: "x"}
    assert str(document.fault(("top", "list", 1, "deep"), "w")) == "f:2:20: top.list[1].deep: w"
    assert str(document.fault_at_key(("top", "list", 1, "deep"), "w")) == "f:2:14: top.list[1].deep: w"
    assert str(document.fault(("top", "nothing", 3), "w")) == "f:1:1: top: w", (
        "the nearest above that is there"
    )


@pytest.mark.parametrize("ends", [b"\n", b"\r\n"])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_line_ends_and_byte_order_mark_change_no_place(ends: bytes, mark: bytes) -> None:
    document = read_document(mark + ends.join([b"a: 1", b"b:", b"  c: 5 s", b""]), "f")
    assert str(document.fault(("b", "c"), "w")) == "f:3:6: b.c: w"


def test_a_section_below_its_key_is_shown_at_the_key() -> None:
    document = read_document(b"a: 1\npulse:\n  rail: 12 V\n", "f")
    assert document.fault(("pulse",), "w").where == "f:2:1: pulse"


def test_what_is_renamed_is_still_called_by_its_own_name() -> None:
    document = read_document(b"part: {label: x}\n", "f").renamed(
        ("part",), ("parts", 0), {"parts": [{"label": "x"}]}
    )
    assert isinstance(document, Document)
    assert document.fault(("parts", 0, "label"), "w").where == "f:1:15: part.label"
    assert document.fault(("parts",), "w").where == "f:1:7: part"


@pytest.mark.parametrize(
    ("keys", "called"),
    [(("a", "b", 3, "c"), "a.b[3].c"), ((0,), "[0]"), ((), "")],
)
def test_dotted_paths(keys: tuple[str | int, ...], called: str) -> None:
    assert dotted(keys) == called


def test_a_missing_file_names_its_nearest_neighbour(tmp_path: Path) -> None:
    (tmp_path / "night.yaml").write_text("a: 1")
    with pytest.raises(
        InputError, match=r"no such file; name the YAML file of a test plan \(there is 'night.yaml'"
    ):
        read_bytes(tmp_path / "nigth.yaml", kind="test plan")


def test_a_folder_and_a_giant_are_no_plans(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a folder; name the YAML file of a bench"):
        read_bytes(tmp_path, kind="bench")
    (tmp_path / "big.yaml").write_bytes(b"#" * 5_000_000)
    with pytest.raises(InputError, match="too big for a bench"):
        read_bytes(tmp_path / "big.yaml", kind="bench")
