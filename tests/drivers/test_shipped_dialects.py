"""The dialect files that come with the program: whole, standard where they say so, and the same bench in two spellings."""

import re
from pathlib import Path

import pytest

from drivers import Dialect
from drivers.needs import ROLES

DIALECTS = Path(__file__).resolve().parents[2] / "plans" / "dialects"
FILES = sorted(path.stem for path in DIALECTS.glob("*.yaml"))

# SCPI-1999 vol. 2 (chapters 3, 4, 9, 14, 15, 17, 18, 19, 20, 21, 23, 24), as the standard prints them; those of the chamber
# and of the LCR meter are standard subsystem headers, for which there is no standard instrument class.
HEADERS = [
    "ABORt",
    "CALCulate:FORMat",
    "FORMat[:DATA]",
    "FORMat:BORDer",
    "INITiate[:IMMediate][:ALL]",
    "INITiate:CONTinuous",
    "MEASure[:SCALar]:VOLTage[:DC]",
    "MEASure[:SCALar]:CURRent[:DC]",
    "MEASure[:SCALar]:FRESistance",
    "MEASure[:SCALar]:TEMPerature",
    "OUTPut[:STATe]",
    "READ",
    "ROUTe:CLOSe",
    "ROUTe:OPEN:ALL",
    "SENSe:FUNCtion[:ON]",
    "SENSe:SWEep:POINts",
    "SENSe:SWEep:TINTerval",
    "SENSe:SWEep:OFFSet:POINts",
    "SENSe:VOLTage[:DC]:RANGe[:UPPer]",
    "SOURce:CURRent[:LEVel][:IMMediate][:AMPLitude]",
    "SOURce:CURRent:PROTection[:LEVel]",
    "SOURce:FREQuency[:CW]",
    "SOURce:FUNCtion[:SHAPe]",
    "SOURce:PULSe:COUNt",
    "SOURce:PULSe:POLarity",
    "SOURce:PULSe:WIDTh",
    "SOURce:TEMPerature[:SPOint]",
    "SOURce:TEMPerature:PROTection[:HIGH][:LEVel]",
    "SOURce:VOLTage[:LEVel][:IMMediate][:AMPLitude]",
    "SOURce:VOLTage:PROTection[:LEVel]",
    "STATus:OPERation:CONDition",
    "SYSTem:ERRor[:NEXT]",
    "TRACe[:DATA]",
    "TRIGger[:SEQuence]:SOURce",
]

# IEEE 488.2-1992, chapter 10: common commands, mandatory but for *TRG.
COMMON = {"*CLS", "*ESR?", "*IDN?", "*OPC?", "*RST", "*TRG"}


def header_patterns() -> list[re.Pattern[str]]:
    """Each header in its long and its short form (SCPI-1999 vol. 1, 6.2.1), optional nodes and all, suffixes allowed."""
    patterns = []
    for header in HEADERS:
        pattern = re.sub(
            r"[A-Za-z]+", lambda word: f"(?:{word[0]}|{re.sub('[a-z]', '', word[0])})\\d?", header
        )
        patterns.append(re.compile(pattern.replace("[", "(?:").replace("]", ")?") + r"\??"))
    return patterns


def messages(dialect: Dialect) -> list[str]:
    """Everything a dialect may send."""
    found = [
        message.text for each in (*dialect.intents.values(), dialect.reset, dialect.safe) for message in each
    ]
    found += [
        dialect.identity or "",
        dialect.errors.ask or "",
        dialect.power_on.ask if dialect.power_on else "",
    ]
    return [text for text in found if text]


@pytest.mark.parametrize("name", FILES)
def test_a_shipped_dialect_is_whole_and_says_what_it_is_for(name: str) -> None:
    path = DIALECTS / f"{name}.yaml"
    assert Dialect.read(path).about
    assert path.read_text("utf-8").startswith("# ")


@pytest.mark.parametrize("name", [name for name in FILES if name.startswith(("scpi_", "long_"))])
def test_a_scpi_dialect_sends_standard_headers_only(name: str) -> None:
    patterns = header_patterns()
    for text in messages(Dialect.read(DIALECTS / f"{name}.yaml")):
        header = text.split()[0]
        assert header in COMMON or any(pattern.fullmatch(header) for pattern in patterns), text


def test_the_header_table_refuses_what_is_no_header() -> None:
    for wrong in ("VOLTAG", "SOUR:VOLTA", "OUTPUT", "MEAS", "SOUR:BURS:NCYC", "TRAC:GAIN?"):
        assert not any(pattern.fullmatch(wrong) for pattern in header_patterns()), wrong


def test_there_is_a_plain_dialect_for_every_role() -> None:
    assert {f"scpi_{role}" for role in ROLES} <= set(FILES)


@pytest.mark.parametrize("name", [name for name in FILES if name.startswith("long_")])
def test_the_long_form_says_the_same(name: str) -> None:
    """Cut to its short form, each long message is that of the plain dialect."""

    def short(text: str) -> str:
        return re.sub(r"[A-Z]{3,}[a-z]+", lambda word: re.sub("[a-z]", "", word[0]), text)

    long_form = Dialect.read(DIALECTS / f"{name}.yaml")
    plain = Dialect.read(DIALECTS / f"{name.replace('long_', 'scpi_')}.yaml")
    assert long_form.terminator.send == long_form.terminator.reply == "CRLF"
    assert [short(text) for text in messages(long_form)] == messages(plain)
    assert messages(long_form) != messages(plain)


def test_dialects_that_put_something_out_can_be_made_safe() -> None:
    for name in FILES:
        dialect = Dialect.read(DIALECTS / f"{name}.yaml")
        if dialect.role not in ("lcr", "thermometer", "ohmmeter"):
            assert dialect.safe, name
