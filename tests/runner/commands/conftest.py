import sys

import pytest

from runner.commands import main


@pytest.fixture
def kneemap(monkeypatch, capsys):
    """Run the command in this process: `kneemap("check", path)` gives (exit status, standard output, standard error)."""

    def call(*words):
        monkeypatch.setattr(sys, "argv", ["kneemap", *map(str, words)])
        with pytest.raises(SystemExit) as left:
            main()
        out, err = capsys.readouterr()
        return left.value.code, out, err

    return call
