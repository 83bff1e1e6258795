"""From a role, a session and a dialect to the object that the sweep works with."""

from typing import Literal, overload

from drivers.chamber import Chamber
from drivers.dialect import Dialect
from drivers.digitizer import Digitizer
from drivers.instrument import Instrument
from drivers.meters import Lcr, Ohmmeter, Thermometer
from drivers.multiplexer import Multiplexer
from drivers.needs import Role
from drivers.session import Session
from drivers.sources import BiasSource, Pulser, Supply

_CLASSES: dict[Role, type[Instrument]] = {
    "supply": Supply,
    "pulser": Pulser,
    "digitizer": Digitizer,
    "lcr": Lcr,
    "bias_source": BiasSource,
    "chamber": Chamber,
    "thermometer": Thermometer,
    "ohmmeter": Ohmmeter,
    "multiplexer": Multiplexer,
}


@overload
def connect(role: Literal["supply"], session: Session, dialect: Dialect) -> Supply: ...
@overload
def connect(role: Literal["pulser"], session: Session, dialect: Dialect) -> Pulser: ...
@overload
def connect(role: Literal["digitizer"], session: Session, dialect: Dialect) -> Digitizer: ...
@overload
def connect(role: Literal["lcr"], session: Session, dialect: Dialect) -> Lcr: ...
@overload
def connect(role: Literal["bias_source"], session: Session, dialect: Dialect) -> BiasSource: ...
@overload
def connect(role: Literal["chamber"], session: Session, dialect: Dialect) -> Chamber: ...
@overload
def connect(role: Literal["thermometer"], session: Session, dialect: Dialect) -> Thermometer: ...
@overload
def connect(role: Literal["ohmmeter"], session: Session, dialect: Dialect) -> Ohmmeter: ...
@overload
def connect(role: Literal["multiplexer"], session: Session, dialect: Dialect) -> Multiplexer: ...
@overload
def connect(role: str, session: Session, dialect: Dialect) -> Instrument: ...


def connect(role: str, session: Session, dialect: Dialect) -> Instrument:
    """The instrument of a role. Nothing is sent yet.

    Raises:
        ValueError: the dialect is for another role.
    """
    if dialect.role != role:
        raise ValueError(
            f"{role}: its dialect is one for a {dialect.role}; name a dialect with 'role: {role}'"
        )
    return _CLASSES[dialect.role](session, dialect)
