"""A dialect is refused when it is read, and the message says what to write."""

from copy import deepcopy

import pytest
import yaml
from pydantic import ValidationError

from drivers import Dialect

CHAMBER = yaml.safe_load("""
role: chamber
terminator: CR
identity: ID
errors: {ask: E, none: E0, in_reply: 'E[1-9]'}
safe: [{send: HALT, expect: OK}]
intents:
  set: [{send: 'S={temperature_degC:.2f}', expect: OK}]
  output_on: [{send: GO, expect: OK}]
  output_off: [{send: HALT, expect: OK}]
  setpoint: [{ask: S, gives: temperature_degC, pattern: 'S=(.*)'}]
  air: [{ask: T, gives: temperature_degC, pattern: 'T=(.*)'}]
""")
PULSER = yaml.safe_load("""
role: pulser
join: ';:'
safe: ['OUTP 0']
words: {polarity: {normal: NORM, inverted: INV}}
intents:
  set: ['SOUR:PULS:WIDT {width}', 'SOUR:PULS:POL {polarity}']
  output_on: ['OUTP 1']
  output_off: ['OUTP 0']
  fire: ['*TRG', {ask: '*OPC?', expect: '1'}]
""")
DIGITIZER = yaml.safe_load("""
role: digitizer
join: ';:'
safe: ['ABOR']
codes: {full_scale: 32768}
intents:
  set: ['SENS:SWE:POIN {samples}']
  arm: ['INIT']
  state: [{ask: 'STAT:OPER:COND?', bits: {waiting: 32}}]
  fetch:
    - {ask: 'TRAC? CH1', gives: voltage, as: samples, of: int16}
    - {ask: 'TRAC? CH2', gives: shunt, as: samples, of: int16}
""")


def faults(base: dict, path: tuple, value: object) -> list[tuple[tuple, str]]:
    """Where and what is wrong with a dialect in which one value was changed (or taken out, for None)."""
    changed = deepcopy(base)
    inner = changed
    for key in path[:-1]:
        inner = inner[key]
    if value is None:
        del inner[path[-1]]
    else:
        inner[path[-1]] = value
    with pytest.raises(ValidationError) as caught:
        Dialect.model_validate(changed)
    return [(fault["loc"], fault["msg"]) for fault in caught.value.errors()]


@pytest.mark.parametrize("base", [CHAMBER, PULSER, DIGITIZER])
def test_a_whole_dialect_is_taken(base: dict) -> None:
    assert Dialect.model_validate(base).role == base["role"]


@pytest.mark.parametrize(
    ("base", "path", "value", "where", "said"),
    [
        (CHAMBER, ("role",), "chambre", ("role",), "'chamber'"),
        (CHAMBER, ("terminator",), "NL", ("terminator", "send"), "'LF', 'CR' or 'CRLF'"),
        (CHAMBER, ("safe",), None, ("safe",), "required"),
        (CHAMBER, ("intents", "air"), None, ("intents",), "a chamber needs the intent 'air'"),
        (CHAMBER, ("intents", "sett"), [], ("intents", "sett"), "no intent 'sett'; did you mean 'set'?"),
        (CHAMBER, ("intents", "xyz"), [], ("intents", "xyz"), "there are set, protect, setpoint, air"),
        (CHAMBER, ("intents", "air"), ["T"], ("intents", "air"), "no reply gives 'temperature_degC'"),
        (
            CHAMBER,
            ("intents", "set"),
            ["S={temperature}"],
            ("intents", "set", 0),
            "unknown placeholder {temperature}; did you mean 'temperature_degC'?",
        ),
        (
            CHAMBER,
            ("safe",),
            ["S={temperature_degC}"],
            ("safe", 0),
            "unknown placeholder {temperature_degC}; nothing can",
        ),
        (
            CHAMBER,
            ("intents", "set"),
            ["S={temperature_degC"],
            ("intents", "set", 0),
            "brace that is no placeholder",
        ),
        (CHAMBER, ("intents", "set"), ["S={temperature_degC:s}"], ("intents", "set", 0), "no number format"),
        (
            CHAMBER,
            ("intents", "air"),
            [{"ask": "T", "gives": "temp_degC"}],
            ("intents", "air", 0),
            "nobody asked for 'temp_degC'; did you mean 'temperature_degC'?",
        ),
        (
            CHAMBER,
            ("intents", "air", 0, "pattern"),
            "T=((",
            ("intents", "air", 0, "pattern"),
            "'T=((' is no regular expression",
        ),
        (CHAMBER, ("intents", "air", 0), {"ask": "T"}, ("intents", "air", 0), "say what the reply brings"),
        (CHAMBER, ("intents", "air", 0, "send"), "T", ("intents", "air", 0), "either 'send' or 'ask'"),
        (
            CHAMBER,
            ("intents", "set", 0, "gives"),
            "temperature_degC",
            ("intents", "set", 0),
            "is an 'ask', not a 'send'",
        ),
        (CHAMBER, ("intents", "air", 0, "as"), "flag", ("intents", "air", 0), "go together"),
        (CHAMBER, ("intents", "air", 0, "as"), "block", ("intents", "air", 0, "as"), "'samples'"),
        (CHAMBER, ("errors", "non"), "E0", ("errors", "non"), "not permitted"),
        (CHAMBER, ("codes",), {"full_scale": 1}, ("codes",), "a chamber has no codes"),
        (PULSER, ("words",), None, ("intents", "set", 1), "say under 'words: polarity:'"),
        (
            PULSER,
            ("words", "polarity"),
            {"normal": "N"},
            ("words", "polarity"),
            "exactly these: normal, inverted",
        ),
        (PULSER, ("words", "polarty"), {}, ("words", "polarty"), "did you mean 'polarity'?"),
        (DIGITIZER, ("codes",), None, ("codes",), "'full_scale'"),
        (
            DIGITIZER,
            ("intents", "fetch", 0),
            {"ask": "TRAC?", "gives": "voltage"},
            ("intents", "fetch", 0),
            "as: samples",
        ),
        (DIGITIZER, ("intents", "fetch", 0, "of"), "int24", ("intents", "fetch", 0, "of"), "'int32'"),
        (
            DIGITIZER,
            ("intents", "state"),
            [{"ask": "STAT:OPER:COND?", "expect": "0"}],
            ("intents", "state"),
            "any of 'waiting', 'measuring', 'done'",
        ),
        (
            DIGITIZER,
            ("intents", "fetch"),
            [{"ask": "*OPC?", "expect": "1"}, *DIGITIZER["intents"]["fetch"]],
            ("intents", "fetch", 1),
            "blocks come first",
        ),
    ],
)
def test_a_fault_is_shown_where_it_stands(
    base: dict, path: tuple, value: object, where: tuple, said: str
) -> None:
    found = faults(base, path, value)
    assert any(loc == where and said in what for loc, what in found), found


def test_all_faults_are_said_at_once() -> None:
    changed = deepcopy(CHAMBER)
    changed["intents"] = {"set": ["S={t}"], "airs": []}
    with pytest.raises(ValidationError) as caught:
        Dialect.model_validate(changed)
    # the placeholder, the unknown intent, and four that lack: output_on, output_off, setpoint, air
    assert caught.value.error_count() == 6


def test_a_dialect_that_was_read_cannot_be_changed() -> None:
    dialect = Dialect.model_validate(CHAMBER)
    with pytest.raises(ValidationError, match="frozen"):
        dialect.join = ";"
