"""Instruments by role, over VISA, each spelled by a dialect file.

Takes a resource name and a `Dialect`; gives one object a role whose methods take and bring SI values and
raise `InstrumentError`s. Knows nothing of plans, runs or records, and never sends a message that is not in a
dialect.
"""

from drivers.chamber import Chamber
from drivers.connect import connect
from drivers.dialect import Dialect
from drivers.digitizer import Capture, Digitizer, DigitizerSetup
from drivers.errors import Disconnected, Garbled, InstrumentError, NoReply, Refused, Restarted
from drivers.instrument import Identity, Instrument
from drivers.meters import Lcr, LcrReading, Ohmmeter, Thermometer
from drivers.multiplexer import Multiplexer
from drivers.scripted import CLOSED, SILENCE, ScriptedSession
from drivers.session import Session
from drivers.sources import BiasSource, Pulser, Supply
from drivers.visa import VisaSession, open_session

__all__ = [
    "CLOSED",
    "SILENCE",
    "BiasSource",
    "Capture",
    "Chamber",
    "Dialect",
    "Digitizer",
    "DigitizerSetup",
    "Disconnected",
    "Garbled",
    "Identity",
    "Instrument",
    "InstrumentError",
    "Lcr",
    "LcrReading",
    "Multiplexer",
    "NoReply",
    "Ohmmeter",
    "Pulser",
    "Refused",
    "Restarted",
    "ScriptedSession",
    "Session",
    "Supply",
    "Thermometer",
    "VisaSession",
    "connect",
    "open_session",
]
