"""Delimited text lines: the decoder, and the encoder that is its inverse under the same card. Pure.

Short chunks are read line by line (rowtext.py), long ones by numpy (rowblock.py); both give the same rows,
replies and counts however the bytes are cut. Without a declared checksum a damaged digit cannot be seen:
declare one.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

import numpy as np

from daq.cards.frame import FrameCard
from daq.stream.block import Floats
from daq.stream.clock import ClockModel
from drivers.checks import check_value
from drivers.decoded import STALE_S, Decoded, PlainReads, Reason
from drivers.framing import LineFramer
from drivers.manylines import ManyLines
from drivers.numbering import Numbering
from drivers.plan import link_of, transmission_s
from drivers.rowblock import RowBlock
from drivers.rowtext import RowText
from drivers.sorting import Sorting, decoded_block
from drivers.timing import timing_for

LINES_SCALAR_ROWS = 128
"""Up to this many lines a chunk is read line by line; above it numpy wins (measured, 22 byte rows with a
check)."""


class LinesDecoder:
    """One link's text lines -> blocks, replies, inputs."""

    def __init__(self, frame: FrameCard, link_number: int, *, scalar_rows: int = LINES_SCALAR_ROWS) -> None:
        link = link_of(frame, link_number)
        self._grammar = RowText(frame, link_number)
        dialect = self._grammar.dialect
        line_end = dialect.line_end.encode("ascii", "replace")
        self._framer = LineFramer(line_end, dialect.line_bytes_max)
        self._block = RowBlock(self._grammar, line_end)
        self._line_end = line_end
        self._byte_s = transmission_s(link, 1)
        plan = self._grammar.plan
        self._numbering = Numbering(plan, timing_for(plan, link), source=link_number, rate_hz=link.rate_hz)
        self._scalar_rows = scalar_rows if self._block.can_read else 1 << 62
        self._first_line = True
        self._broken = False
        self._fresh_from_s: float | None = None

    @property
    def buffered_bytes(self) -> int:
        return self._framer.buffered_bytes

    @property
    def clock(self) -> ClockModel | None:
        """Drift and jitter of the device's counter, where it has one."""
        return self._numbering.clock

    def peek(self, data: bytes, ahead: int) -> list[tuple[float, ...]] | None:
        """See Peeks."""
        end = self._line_end
        if self._first_line or self._broken or self._framer.buffered_bytes or not data.endswith(end):
            return None
        rows: list[tuple[float, ...]] = []
        for line in data[: -len(end)].split(end):
            row = self._grammar.plain(line)
            if row is None or not self._numbering.follows(row, ahead + len(rows)):
                return None
            rows.append(row)
        return rows

    def feed(self, data: bytes, arrival_s: float) -> Decoded:
        """Decode what arrived at arrival_s; never raises on bytes."""
        if self._fresh_from_s is None:
            self._fresh_from_s = arrival_s + STALE_S
        line = None if self._first_line or self._broken else self._framer.take_one(data)
        if line is not None:
            row = self._grammar.plain(line)
            if row is not None:
                on_wire_s = self._byte_s * (len(line) + len(self._line_end))
                block = self._numbering.one(row, arrival_s - on_wire_s)
                if block is not None:
                    return decoded_block(block, arrival_s, self._fresh_from_s)
            data = line + self._line_end
        lines = self._framer.take(data)
        sorting = Sorting(self._broken)
        if lines.overlong:
            sorting.reject(Reason.OVERLONG)
            self._first_line = False
        sorting.discard(lines.discarded_bytes)
        if lines.text:
            if lines.text.count(self._line_end) > self._scalar_rows:
                self._sort_block(lines.text, sorting)
            else:
                self._sort_lines(lines.text, sorting)
        self._broken = sorting.broken
        on_wire_s = self._byte_s * sorting.row_bytes
        return sorting.decoded(self._numbering, arrival_s, on_wire_s, self._fresh_from_s)

    def feed_many(
        self, pieces: Sequence[bytes], arrivals_s: Sequence[float]
    ) -> Iterator[Decoded | PlainReads]:
        """The same as feeding every piece, with runs of plain reads taken at once. Ends early where that is no gain."""
        at = 0
        while at < len(pieces):
            before = at
            for found in self._plain_reads(pieces[at:], arrivals_s[at:]):
                at += len(found.rows) if isinstance(found, PlainReads) else 1
                yield found
            if at == before:
                yield self.feed(pieces[at], arrivals_s[at])
                at += 1

    def _plain_reads(
        self, pieces: Sequence[bytes], arrivals_s: Sequence[float]
    ) -> Iterator[Decoded | PlainReads]:
        """Reads up to one that has to be fed by itself, that one, and so on; stops when in doubt."""
        many = self._many_lines(pieces)
        at = 0
        while many is not None and at < len(pieces):
            stop = many.plain_until(at)
            block = None
            if stop > at and not self._broken and not self._first_line:
                rows, first, last = many.rows[at:stop], many.first_row[at], many.first_row[stop]
                ends_s = [
                    arrival_s - self._byte_s * line_bytes
                    for arrival_s, line_bytes in zip(
                        arrivals_s[at:stop], many.last_bytes[at:stop], strict=True
                    )
                ]
                block = self._numbering.plain_reads(many.values[first:last], rows, ends_s)
            if block is None:
                self._framer.go_on_from(many.rest_at[at])
                yield self.feed(pieces[at], arrivals_s[at])
                at += 1
                continue
            self._framer.go_on_from(many.rest_at[stop])
            yield PlainReads(block, rows)
            at = stop

    def _many_lines(self, pieces: Sequence[bytes]) -> ManyLines | None:
        rest = self._framer.rest
        if rest is None or not self._block.can_read:
            return None
        return ManyLines.of(self._block, self._line_end, self._grammar.dialect.line_bytes_max, rest, pieces)

    def _sort_lines(self, text: bytes, sorting: Sorting) -> None:
        grammar, ends = self._grammar, len(self._line_end)
        lines = text.split(self._line_end)
        lines.pop()
        if self._first_line:
            self._first_line = False
            line = lines.pop(0)
            _add(sorting, grammar.first(line), len(line) + ends)
        for line in lines:
            _add(sorting, grammar.plain(line) or grammar.classify(line), len(line) + ends)

    def _sort_block(self, text: bytes, sorting: Sorting) -> None:
        certified = self._block.certify(text)
        start, stop, plain = certified.start, certified.stop, certified.plain
        if self._first_line:
            plain[0] = False
        done = 0
        for doubtful in np.flatnonzero(~plain).tolist():
            sorting.add_block(certified.values[done:doubtful])
            line = text[start[doubtful] : stop[doubtful]]
            found = self._grammar.first(line) if self._first_line else self._grammar.classify(line)
            self._first_line = False
            _add(sorting, found, len(line) + len(self._line_end))
            done = doubtful + 1
        sorting.add_block(certified.values[done:])
        sorting.row_bytes = int(stop[-1] - start[-1]) + len(self._line_end)


def _add(sorting: Sorting, found: tuple[float, ...] | Reason | bytes | None, line_bytes: int) -> None:
    if isinstance(found, tuple):
        sorting.add_row(found)
        sorting.row_bytes = line_bytes
    elif isinstance(found, bytes):
        sorting.add_reply(found)
    else:
        sorting.discard(line_bytes)
        if found is not None:
            sorting.reject(found)


class LinesEncoder:
    """Numbers -> the text lines a machine under this card sends. Columns the card does not use are sent as
    0."""

    def __init__(self, frame: FrameCard, link_number: int) -> None:
        grammar = RowText(frame, link_number)
        self._grammar = grammar
        self._line_end = grammar.dialect.line_end.encode("ascii", "replace")
        self._separator = grammar.dialect.separator.encode("ascii", "replace")
        check = 1 if grammar.check_digits else 0
        self._check = grammar.dialect.checksum if check else None
        by_column = any(want.column is not None for want in grammar.wants)
        self._columns = grammar.dialect.columns or (grammar.fields_min if by_column else 0)
        self._form, self._order = self._layout()

    def encode(
        self,
        counts: Floats,
        *,
        first_counter: int = 0,
        time_s: Floats | None = None,
        inputs: Mapping[str, bool] | None = None,
    ) -> bytes:
        """counts: (n, k) in channel order. inputs: which status inputs are active (those in columns)."""
        special = self._special(len(counts), first_counter, time_s, inputs or {})
        return b"".join(self._line([*row, *more]) for row, more in zip(counts.tolist(), special, strict=True))

    def reply(self, text: bytes) -> bytes:
        """A reply of the machine as it stands between the rows."""
        return text + self._line_end

    def _special(
        self, count: int, first_counter: int, time_s: Floats | None, inputs: Mapping[str, bool]
    ) -> list[list[float]]:
        plan = self._grammar.plan
        rows = []
        for row in range(count):
            more = [0.0] * (len(self._grammar.wants) - plan.channels)
            if plan.counter is not None:
                counter = first_counter + row
                more[plan.counter - plan.channels] = counter % plan.modulus if plan.modulus else counter
            if plan.time is not None and time_s is not None:
                more[plan.time - plan.channels] = round(float(time_s[row]) / plan.time_unit_s)
            for rule in plan.inputs:
                on = inputs.get(rule.name, False) == rule.active_when
                more[rule.position - plan.channels] += on << (rule.bit or 0)
            rows.append(more)
        return rows

    def _line(self, values: list[float]) -> bytes:
        texts = [_number_text(value) for value in values]
        if self._grammar.dialect.decimal_comma:
            texts = [text.replace(b".", b",") for text in texts]
        line = self._form % tuple([texts[place] for place in self._order])
        if self._check is not None:
            digits = b"%0*X" % (self._grammar.check_digits, check_value(self._check, line))
            return line + self._separator + digits + self._line_end
        return line + self._line_end

    def _layout(self) -> tuple[bytes, tuple[int, ...]]:
        """The row as a template, and which value stands at each of its places."""
        wants = self._grammar.wants
        columns = {want.column: place for place, want in enumerate(wants) if want.label is None}
        fields = [b"%b" if column in columns else b"0" for column in range(self._columns)]
        order = [columns[column] for column in range(self._columns) if column in columns]
        for place, want in enumerate(wants):
            if want.label is not None:
                fields.append((want.label + self._grammar.label_separator).replace(b"%", b"%%") + b"%b")
                order.append(place)
        separator = self._separator.replace(b"%", b"%%")
        return self._grammar.prefix.replace(b"%", b"%%") + separator.join(fields), tuple(order)


def _number_text(value: float) -> bytes:
    """Shortest text that reads back to the same float."""
    if value % 1 == 0 and -1e15 < value < 1e15:
        return b"%d" % value
    return repr(float(value)).encode("ascii")
