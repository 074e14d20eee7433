"""RowText: one text line -> the numbers of a row, a reply, or the reason why neither. The grammar, plainly
written.

The block decoder (rowblock.py) may only accept what this accepts, with the same numbers.

A row:   [prefix] field {separator field} [separator check]
field:   [label label_separator] number [unit]      blanks around each part are ignored
number:  sign, digits, point (or comma), digits, exponent; or "nan". Infinity, hexadecimal, underscores are
refused.
Columns are counted from 1 in what follows the prefix; the check field is not counted.
"""

from __future__ import annotations

import re

from daq.cards.derived import channels_of
from daq.cards.frame import Channel, FrameCard, LinesDialect
from daq.errors import CardError
from drivers.checks import CHECK_BYTES, check_function, check_value
from drivers.decoded import Reason
from drivers.plan import InputRule, RowPlan, inputs_in_rows, known_replies, link_of

INFINITY = float("inf")
NAN = float("nan")
WIRE_UNITS: dict[str, tuple[bytes, ...]] = {"percent": (b"percent", b"%"), "": (), "1": ()}
"""How a declared unit may stand behind a number on the wire; others stand as declared."""

_PRINTABLE = re.compile(rb"[\x20-\x7e\t]+")
_NUMBER = rb"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"


class Want:
    """One wanted field of a row: by column (0-based) or by label."""

    __slots__ = ("column", "label", "units")

    def __init__(self, column: int | None, label: bytes | None, units: tuple[bytes, ...]) -> None:
        self.column = column
        self.label = label
        self.units = units


class RowText:
    """The row grammar of one link."""

    def __init__(self, frame: FrameCard, link_number: int) -> None:
        link = link_of(frame, link_number)
        dialect = link.lines
        if dialect is None:
            raise CardError((f"link {link.name}: dialect = lines: needs a [links.lines] table",))
        self.dialect = dialect
        self.prefix = dialect.prefix.encode("ascii", "replace")
        self.separator = dialect.separator.strip(" ").encode("ascii", "replace")  # b"" = any run of blanks
        self.label_separator = dialect.label_separator.encode("ascii", "replace")
        self.check_digits = 2 * CHECK_BYTES[dialect.checksum]
        self.known = known_replies(frame, link)
        self.wants, self.plan = _wanted(frame, link_number, dialect)
        self.fields_min = max((want.column + 1 for want in self.wants if want.column is not None), default=1)
        point = b"," if dialect.decimal_comma else b"."
        if point == self.separator:
            raise CardError(
                (f"link {link.name}: decimal_comma with separator ',': choose another separator",)
            )
        number = _NUMBER.replace(rb"\.", re.escape(point))
        self._number = re.compile(rb"\s*(" + number + rb")\s*")
        self._number_and_unit = re.compile(rb"\s*(" + number + rb")\s*([^\d\s].*)")
        self._hex = b"%%0%dX" % self.check_digits
        self._line_bytes_max = dialect.line_bytes_max
        self._check_of = check_function(dialect.checksum)
        self._groups: tuple[int, ...] = ()
        self._plain = self._plain_form()

    def plain(self, line: bytes) -> tuple[float, ...] | None:
        """The numbers of a row of the usual plain form, quickly; None: ask `classify`."""
        found = self._plain.fullmatch(line) if self._plain is not None else None
        if found is None or len(line) > self._line_bytes_max:
            return None
        head, check, *fields = found.group(*self._groups)
        if check and int(check, 16) != self._check_of(head):
            return None
        return tuple(map(float, fields))

    def _plain_form(self) -> re.Pattern[bytes] | None:
        """Prefix, exact fields of up to 15 digits without blanks or units, check. Other rows are left to
        `classify`."""
        if not self.separator or self.label_separator or self.dialect.decimal_comma or not self.prefix:
            return None
        separator = re.escape(self.separator)
        other = b"[^" + re.escape(self.separator[:1]) + b"]*"
        columns = sorted({want.column for want in self.wants if want.column is not None})
        fields = [
            rb"([+-]?\d{1,15}(?:\.\d{1,9})?)" if at in columns else other for at in range(self.fields_min)
        ]
        if (self.dialect.columns or self.fields_min) != self.fields_min or len(self.separator) > 1:
            return None
        places = (columns.index(want.column) + 2 for want in self.wants if want.column is not None)
        self._groups = (1, len(columns) + 2, *places)
        check = separator + rb"([0-9A-F]{%d})" % self.check_digits if self.check_digits else b"()"
        return re.compile(b"(" + re.escape(self.prefix) + separator.join(fields) + b")" + check)

    def classify(self, line: bytes) -> tuple[float, ...] | Reason | bytes | None:
        """The row's numbers in plan order, why it is rejected, the text of a reply, or None for a blank
        line."""
        if len(line) > self.dialect.line_bytes_max:
            return Reason.OVERLONG
        if not self._begins_like_row(line):
            return self._other(line)
        head = line
        if self.check_digits:
            checked = self._checked(line)
            if checked is None:
                return Reason.CHECKSUM
            head = checked
        return self._row(head)

    def first(self, line: bytes) -> tuple[float, ...] | Reason | bytes | None:
        """The first line since the port was opened may lack its beginning: believe it only when it proves
        itself."""
        found = self.classify(line)
        if isinstance(found, tuple) and (self.prefix or self.check_digits):
            return found
        if found is None or found is Reason.OVERLONG:
            return found
        return found if isinstance(found, bytes) and found.startswith(self.known) else Reason.PARTIAL

    def _begins_like_row(self, line: bytes) -> bool:
        if self.prefix:
            return line.startswith(self.prefix)
        if self.label_separator:
            return self.label_separator in line and not (self.known and line.startswith(self.known))
        word = line[:1].isalpha() and line[:3].lower() != b"nan"
        return not word and bool(line.strip()) and not (self.known and line.startswith(self.known))

    def _checked(self, line: bytes) -> bytes | None:
        """What stands before the check field, when the check matches."""
        if self.separator:
            head, _, digits = line.rpartition(self.separator)
        else:
            parts = line.rsplit(None, 1)
            head, digits = parts if len(parts) == 2 else (b"", line)
        if digits.strip().upper() != self._hex % check_value(self.dialect.checksum, head):
            return None
        return head

    def _row(self, head: bytes) -> tuple[float, ...] | Reason:
        if len(head) < len(self.prefix):
            return Reason.FIELDS
        fields = head[len(self.prefix) :].split(self.separator or None)
        if len(fields) < self.fields_min or len(fields) != (self.dialect.columns or len(fields)):
            return Reason.FIELDS
        labelled: dict[bytes, bytes] = {}
        if self.label_separator:
            for field in fields:
                label, found, rest = field.partition(self.label_separator)
                label = label.strip()
                if found and label in labelled:
                    return Reason.LABEL
                if found:
                    labelled[label] = rest
        row = []
        for want in self.wants:
            text = self._field(want, fields, labelled)
            if text is None:
                return Reason.FIELDS
            value = self._value(text, want.units)
            if isinstance(value, Reason):
                return value
            row.append(value)
        return tuple(row)

    def _field(self, want: Want, fields: list[bytes], labelled: dict[bytes, bytes]) -> bytes | None:
        if want.label is not None:
            return labelled.get(want.label)
        assert want.column is not None
        field = fields[want.column]
        return field.partition(self.label_separator)[2] or field if self.label_separator else field

    def _value(self, field: bytes, units: tuple[bytes, ...]) -> float | Reason:
        found = self._number.fullmatch(field)
        if found is None:
            found = self._number_and_unit.fullmatch(field)
            if found is None:
                return NAN if field.strip().lower() == b"nan" else Reason.NUMBER
            unit = found[2].strip()
            if unit not in units:
                return Reason.UNIT if unit.isalpha() or unit == b"%" else Reason.NUMBER
        digits = found[1]
        value = float(digits.replace(b",", b".") if self.dialect.decimal_comma else digits)
        return value if -INFINITY < value < INFINITY else Reason.NUMBER

    def _other(self, line: bytes) -> Reason | bytes | None:
        text = line.strip()
        if not text:
            return None
        if self.known and text.startswith(self.known):
            return text
        if not _PRINTABLE.fullmatch(text):
            return Reason.TEXT
        if self.prefix and self._numbers_in(text) >= max(1, self.fields_min - 1):
            return Reason.PREFIX
        return text

    def _numbers_in(self, text: bytes) -> int:
        return sum(self._number.fullmatch(field) is not None for field in text.split(self.separator or None))


def _wanted(frame: FrameCard, link_number: int, dialect: LinesDialect) -> tuple[tuple[Want, ...], RowPlan]:
    channels = channels_of(frame, link_number)
    wants = [_channel_want(channel) for channel in channels]
    places: dict[int, int] = {}

    def place(column: int) -> int:
        if column not in places:
            places[column] = len(wants)
            wants.append(Want(column - 1, None, ()))
        return places[column]

    counter = None if dialect.counter_column is None else place(dialect.counter_column)
    time = None if dialect.time_column is None else place(dialect.time_column)
    rules = []
    for status in inputs_in_rows(frame, link_number):
        if status.column is None:
            raise CardError((f"input {status.name}: source = column: needs `column` on a lines link",))
        rules.append(InputRule(status.name, place(status.column), status.bit, status.active_when))
    plan = RowPlan(
        channels=len(channels),
        counter=counter,
        modulus=dialect.counter_modulus,
        time=time,
        time_unit_s=dialect.time_unit_s or 1.0,
        inputs=tuple(rules),
    )
    return tuple(wants), plan


def _channel_want(channel: Channel) -> Want:
    if channel.label is None and channel.column is None:
        raise CardError((f"channel {channel.name}: on link {channel.link}: needs `column` or `label`",))
    unit = channel.unit
    units = WIRE_UNITS.get(unit, (unit.encode("ascii"),))
    label = None if channel.label is None else channel.label.encode("ascii", "replace")
    return Want(None if channel.column is None else channel.column - 1, label, units)
