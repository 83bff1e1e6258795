"""What is said when a run has ended."""

import sys
from types import SimpleNamespace

import pytest

import runner.report
from runner.commands.run import _tell_result


@pytest.fixture
def folder(tmp_path, monkeypatch):
    (tmp_path / "report").mkdir()
    (tmp_path / "report" / "part_00_saturation.png").write_bytes(b"a picture")
    monkeypatch.setattr(
        runner.report, "headlines", lambda folder: ("A-22: lowest at 125 °C", "B-47: lowest at 105 °C")
    )
    return tmp_path


def messenger(monkeypatch, sent, *, delivers=True):
    """A stand-in for the optional library that delivers messages."""

    class Apprise:
        def add(self, url):
            return True

        def notify(self, **message):
            sent.append(message)
            return delivers

    monkeypatch.setitem(sys.modules, "apprise", SimpleNamespace(Apprise=Apprise))


def test_the_answer_of_every_part_and_a_picture_are_sent(folder, monkeypatch, capsys):
    sent = []
    messenger(monkeypatch, sent)
    monkeypatch.setenv("KNEEMAP_NOTIFY", "json://127.0.0.1/secret")
    _tell_result(folder)
    (message,) = sent
    assert message["body"] == "A-22: lowest at 125 °C\nB-47: lowest at 105 °C"
    assert message["attach"].endswith("part_00_saturation.png")
    assert capsys.readouterr().err == ""


def test_a_message_that_fails_is_told_without_its_address_and_harms_nothing(folder, monkeypatch, capsys):
    messenger(monkeypatch, [], delivers=False)
    monkeypatch.setenv("KNEEMAP_NOTIFY", "json://127.0.0.1/secret")
    _tell_result(folder)
    said = capsys.readouterr().err
    assert "KNEEMAP_NOTIFY" in said
    assert "secret" not in said


def test_nobody_is_told_who_did_not_ask(folder, monkeypatch):
    sent = []
    messenger(monkeypatch, sent)
    monkeypatch.delenv("KNEEMAP_NOTIFY", raising=False)
    _tell_result(folder)
    assert not sent
