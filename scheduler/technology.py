"""What may be built: units, what each performs, its timing and its area.

A technology is a TOML file, or the same tables inside a design. This module also reads such tables
in general (`Table`), for designs too: every fault is told with its file and key. Whether the
figures are true of any silicon is not checked.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any, NoReturn

from scheduler.errors import InputError
from scheduler.graph import PORTS, Kind
from scheduler.interchange import read_bytes
from scheduler.quantities import decimal_text, exact_number, shortened

RESOURCES = ("area", "registers", "latency", "parallelism")
"""What a design can cap besides units; no unit may bear such a name."""

LONGEST_TIME = 1000
"""Most cycles of a latency or a busy time."""

_PERFORMABLE = tuple(kind for kind in Kind if kind not in PORTS)
_UNIT_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]{0,39}")


@dataclass(frozen=True)
class Unit:
    """A piece of hardware that performs operations, one after another.

    Attributes:
        latency: l, cycles from the start of an operation to its result, at least 1; the last of
            its pipeline registers is the output register.
        busy: b, cycles before the next operation can start: 1 when fully pipelined. It may exceed
            the latency, as for a unit that has to recover after its result is out.
        area: in the technology's unit of area.
    """

    name: str
    performs: frozenset[Kind]
    latency: int
    busy: int
    area: Fraction

    def document(self) -> dict[str, Any]:
        """The unit's table in a technology, as plain data."""
        return {
            "performs": [str(kind) for kind in _PERFORMABLE if kind in self.performs],
            "latency": self.latency,
            "busy": self.busy,
            "area": plain_number(self.area),
        }


@dataclass(frozen=True)
class Technology:
    """The units that may be built, and the area of one register, in the same unit of area."""

    title: str
    units: tuple[Unit, ...]
    register_area: Fraction

    def unit_for(self, kind: Kind) -> Unit:
        """The unit that performs a kind of operation.

        Raises:
            InputError: no unit does.
        """
        for unit in self.units:
            if kind in unit.performs:
                return unit
        raise InputError(
            f"no unit of the technology '{shortened(self.title)}' performs '{kind}'",
            remedy="use a technology that has one",
        )

    def unit(self, name: str) -> Unit:
        """The unit of a name.

        Raises:
            InputError: there is none.
        """
        for unit in self.units:
            if unit.name == name:
                return unit
        raise InputError(
            f"the technology '{shortened(self.title)}' has no unit '{shortened(name)}'",
            remedy=near(name, [unit.name for unit in self.units]),
        )

    def document(self) -> dict[str, Any]:
        """The technology as plain data, which `technology_from` reads back."""
        return {
            "title": self.title,
            "unit": {unit.name: unit.document() for unit in self.units},
            "register": {"area": plain_number(self.register_area)},
        }


# Where technologies come from


def models_folder() -> Path:
    """The folder of what ships ready to use, in an installed package or in a checkout.

    Raises:
        InputError: it is missing.
    """
    package = Path(__file__).parent
    for folder in (package / "models", package.parent / "models"):
        if folder.is_dir():
            return folder
    raise InputError("the shipped models are missing", remedy="install the package again")


def shipped(what: str) -> dict[str, Path]:
    """The shipped files of one sort ("technology" or "designs"), by name."""
    paths = {path.stem: path for path in (models_folder() / what).glob("*.toml")}
    return dict(sorted(paths.items()))


def exists(path: Path) -> bool:
    """Whether something bears the name; False also for what can be nobody's name."""
    try:
        return path.exists()
    except OSError:  # a name that is too long
        return False


def load_technology(name_or_path: str, folder: Path) -> Technology:
    """Reads a technology.

    Args:
        name_or_path: the name of a shipped one, or the path of a TOML file.
        folder: what the path is relative to.

    Raises:
        InputError: for an unknown name, an unreadable file, and tables that make no technology.
    """
    known = shipped("technology")
    path = known.get(name_or_path, folder / name_or_path)
    if not name_or_path.endswith(".toml") and not exists(path):
        raise InputError(
            f"there is no technology '{shortened(name_or_path)}'",
            remedy=f"the shipped ones are {', '.join(known)}; a file of your own ends in .toml",
        )
    return technology_from(read_toml(path), str(path))


def technology_from(document: Mapping[str, Any], place: str) -> Technology:
    """Builds a technology from its tables.

    Args:
        document: as TOML or `Technology.document` gives it.
        place: the file that faults are told with.

    Raises:
        InputError: for the first fault.
    """
    return technology_of(Table(document, place))


def technology_of(table: Table) -> Technology:
    """Builds a technology from a table, which may be part of a design.

    Raises:
        InputError: for the first fault.
    """
    table.only("title", "unit", "register", "multiplexer")
    _check_multiplexer(table.table("multiplexer"))
    tables = table.table("unit")
    if not tables.entries:
        table.refuse("unit", "there is no unit", "add one, as in [unit.adder]")
    units = tuple(_unit(tables.table(name), name) for name in tables.entries)
    _check_shared_kinds(units, tables)
    register = table.table("register")
    register.only("area")
    return Technology(table.line("title"), units, register.amount("area"))


def _unit(table: Table, name: str) -> Unit:
    if not _UNIT_NAME.fullmatch(name) or name in RESOURCES:
        table.refuse(
            "",
            f"a unit cannot be named '{shortened(name)}'",
            "use up to 40 letters, digits, - and _, beginning with a letter, and none of "
            f"{', '.join(RESOURCES)}",
        )
    table.only("performs", "latency", "busy", "area")
    return Unit(
        name,
        frozenset(_performs(table)),
        table.whole("latency", 1, LONGEST_TIME),
        table.whole("busy", 1, LONGEST_TIME),
        table.amount("area"),
    )


def _performs(table: Table) -> Iterator[Kind]:
    names = table.texts("performs")
    if not names:
        table.refuse("performs", "the unit performs nothing", f"name some of {_kinds()}")
    for name in names:
        if name in PORTS:
            table.refuse(
                "performs", f"'{name}' is a port, which needs no unit", f"name some of {_kinds()}"
            )
        if name not in _PERFORMABLE:
            table.refuse(
                "performs",
                f"'{shortened(name)}' is not a kind of operation",
                near(name, _PERFORMABLE),
            )
        yield Kind(name)


def _kinds() -> str:
    return ", ".join(_PERFORMABLE)


def _check_shared_kinds(units: Iterable[Unit], table: Table) -> None:
    performer: dict[Kind, str] = {}
    for unit in units:
        for kind in _PERFORMABLE:
            if kind not in unit.performs:
                continue
            if kind in performer:
                table.table(unit.name).refuse(
                    "performs",
                    f"'{kind}' is performed by unit '{performer[kind]}' too, and a choice between "
                    "units is not yet made",
                    "leave it to one of them",
                )
            performer[kind] = unit.name


def _check_multiplexer(table: Table) -> None:
    table.only("input_area")
    if "input_area" in table and table.amount("input_area"):
        table.refuse(
            "input_area",
            "what sharing costs is not yet part of the objective, so a plan would not be true",
            "set it to 0",
        )


# Tables of TOML


def read_toml(path: Path) -> dict[str, Any]:
    """The tables of a TOML file; numbers with a point are exact decimals.

    Raises:
        InputError: for a file that cannot be read, is not in UTF-8, or is not TOML.
    """
    try:
        return tomllib.loads(read_bytes(path).decode("utf-8-sig"), parse_float=Decimal)
    except UnicodeDecodeError:
        raise InputError(
            "the file is not in UTF-8", place=str(path), remedy="save it as UTF-8 text"
        ) from None
    except (ValueError, ArithmeticError, RecursionError) as error:
        raise InputError(
            f"this is not TOML: {shortened(str(error), 100)}",
            place=str(path),
            remedy="mend it there",
        ) from None


def plain_number(value: Fraction) -> int | float | str:
    """A number as JSON can hold it exactly: as text where its decimal digits exceed a float's."""
    if value.denominator == 1:
        return value.numerator
    text = decimal_text(value)
    number = float(text)
    return number if Decimal(repr(number)) == Decimal(text) else text


@contextmanager
def placed(place: str) -> Iterator[None]:
    """Puts the place in front of every fault that is raised inside."""
    try:
        yield
    except InputError as fault:
        raise fault.within(place) from None


@dataclass(frozen=True)
class Table:
    """A table of a TOML file or of plain data, read key by key.

    A number may stand as text as well, which is how plain data holds it where no float is exact.

    Attributes:
        entries: what it holds.
        file: the file, or what else it came from.
        name: its dotted name within the file; empty for the whole.
        changed: keys that somebody changed from outside, and the place to name for each.
    """

    entries: Mapping[str, Any]
    file: str
    name: str = ""
    changed: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not isinstance(self.entries, Mapping):
            self.refuse("", f"{_article(self.entries)} stands where a table belongs")

    def __contains__(self, key: str) -> bool:
        return key in self.entries

    def at(self, key: str = "") -> str:
        """The place of a key, or of the table itself, for messages."""
        if key in self.changed:
            return self.changed[key]
        head = f"[{self.name}]" if self.name else ""
        inner = " ".join(part for part in (head, shortened(key)) if part)
        return ": ".join(part for part in (self.file, inner) if part)

    def refuse(self, key: str, what: str, remedy: str = "") -> NoReturn:
        """Raises the fault of a key, or of the table itself where the key is empty."""
        raise InputError(what, place=self.at(key), remedy=remedy)

    def only(self, *known: str) -> None:
        """Refuses keys that mean nothing here."""
        for key in self.entries:
            if key not in known:
                self.refuse("", f"the key '{shortened(key)}' is unknown", near(key, known))

    def changed_by(
        self, entries: Mapping[str, Any], places: Mapping[str, str], without: Iterable[str] = ()
    ) -> Table:
        """The table with other entries, told with places of their own, and some left out."""
        kept = {key: value for key, value in self.entries.items() if key not in set(without)}
        return replace(self, entries={**kept, **entries}, changed=places)

    def table(self, key: str) -> Table:
        """The table of a key; an empty one where there is none."""
        name = f"{self.name}.{key}" if self.name else key
        return Table(self.entries.get(key, {}), self.file, shortened(name))

    def value(self, key: str) -> object:
        """What stands at a key that has to be there."""
        if key not in self.entries:
            self.refuse("", f"'{key}' is missing", "add it")
        return self.entries[key]

    def text(self, key: str) -> str:
        """The text of a key."""
        value = self.value(key)
        if not isinstance(value, str):
            self.refuse(key, f"{_article(value)} stands where text belongs", "put it into quotes")
        return value

    def line(self, key: str) -> str:
        """The text of a key, which fills one line and can be shown as it is."""
        text = self.text(key)
        if not text or not text.isprintable():
            self.refuse(
                key,
                "this is not one line of text" if text else "this text is empty",
                "write one line of printable characters",
            )
        return text

    def texts(self, key: str) -> tuple[str, ...]:
        """The list of texts of a key."""
        value = self.value(key)
        if not isinstance(value, list) or not all(isinstance(entry, str) for entry in value):
            self.refuse(key, "this is not a list of texts", 'write one such as ["x", "z"]')
        return tuple(value)

    def number(self, key: str) -> Fraction:
        """The exact number of a key."""
        value = self.value(key)
        with placed(self.at(key)):
            return exact_number(str(value))

    def amount(self, key: str) -> Fraction:
        """The exact number of a key, 0 or more."""
        value = self.number(key)
        if value < 0:
            self.refuse(key, f"{self.shown(key)} is negative", "write a number of 0 or more")
        return value

    def whole(self, key: str, least: int, most: int | None = None) -> int:
        """The whole number of a key, within the two limits."""
        value = self.number(key)
        limits = f"of {least} or more" if most is None else f"from {least} to {most}"
        if value.denominator != 1 or value < least or (most is not None and value > most):
            self.refuse(key, f"{self.shown(key)} is not a whole number {limits}")
        return value.numerator

    def shown(self, key: str) -> str:
        """What stands at a key, short enough to be quoted."""
        return shortened(str(self.value(key)))


_ARTICLES: tuple[tuple[type, str], ...] = (
    (str, "a text"),
    (bool, "true or false"),
    (list, "a list"),
    (Mapping, "a table"),
    (int, "a number"),
    (float, "a number"),
    (Decimal, "a number"),
)


def _article(value: object) -> str:
    """What a value is, in words."""
    return next((words for sort, words in _ARTICLES if isinstance(value, sort)), "something else")


def near(name: str, known: Iterable[str]) -> str:
    """A way out of an unknown name: the known one that looks most like it, or all of them."""
    known = list(known)
    near = difflib.get_close_matches(name, known, n=1)
    return f"did you mean '{near[0]}'?" if near else f"known here: {', '.join(known)}"
