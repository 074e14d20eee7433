"""Every cross rule of a frame card, one change of a good card each; the expected lines are all."""

from __future__ import annotations

import pytest

A, B, C = "kiln-lane-a.toml", "kiln-lane-b.toml", "kiln-lane-c.toml"
INPUT = '[[inputs]]\nname = "shield_open"\nsource = "reply"\nletter = "S"\n'
FORCE = '[[channels]]\nname = "force"'
EXTRA = '[[channels]]\nname = "extra"\nlink = "main"\nrole = "{role}"\nunit = "{unit}"\ncolumn = 4\n'
LINK = '[[links]]\nname = "{name}"\nkind = "tcp"\nhost = "127.0.0.1"\ntcp_port = {port}\nrate_hz = 10.0\n'
LINK += 'dialect = "lines"\n[links.lines]\n'


def extra(role: str, unit: str) -> tuple[str, str]:
    return (FORCE, EXTRA.format(role=role, unit=unit) + FORCE)


# (card, changes, expected: start of each line and a part of it)
RULES = [
    # --- links: binding ---
    ("no port", A, [('port = "kiln-lane-a.tty"', "")], ["links[main].port = (missing)|exactly one of port"]),
    (
        "port and device serial",
        A,
        [('port = "kiln', 'device_serial = "K1"\nport = "kiln')],
        ["links[main].port = 'kiln-lane-a.tty'|exactly one"],
    ),
    (
        "host on serial",
        A,
        [('kind = "serial"', 'kind = "serial"\nhost = "h"')],
        ["links[main].host = 'h'|not used"],
    ),
    (
        "tcp without host",
        B,
        [('host = "127.0.0.1"', "")],
        ["links[main].host = (missing)|needs host and tcp_port"],
    ),
    ("tcp without port", B, [("tcp_port = 27150", "")], ["links[main].tcp_port = (missing)|needs host"]),
    ("port on tcp", B, [('kind = "tcp"', 'kind = "tcp"\nport = "x"')], ["links[main].port = 'x'|not used"]),
    (
        "two links on one port",
        B,
        [("[[channels]]", LINK.format(name="second", port=27150) + "\n[[channels]]")],
        ["links[second].tcp_port = 27150|link 'main' has this one"],
    ),
    (
        "two links of one name",
        B,
        [("[[channels]]", LINK.format(name="main", port=27151) + "\n[[channels]]")],
        ["links[main].name = 'main'|a name of its own"],
    ),
    # --- links: dialect ---
    (
        "dialect table missing",
        C,
        [
            ("[links.lines]", ""),
            ('separator = " "', ""),
            ('line_end = "\\r\\n"', ""),
            ("decimal_comma = true", ""),
            ('label_separator = "="', ""),
        ],
        ["links[indicator].lines = (missing)|add the table [links.lines]"],
    ),
    (
        "second dialect table",
        B,
        [("[[channels]]", "[links.lines]\n\n[[channels]]")],
        ["links[main].lines = (a table)|only the table of dialect 'packets'"],
    ),
    (
        "decimal comma and comma separator",
        A,
        [('prefix = "D"', 'prefix = "D"\ndecimal_comma = true')],
        ["links[main].lines.separator = ','|no comma"],
    ),
    (
        "decimal comma and comma after the label",
        C,
        [('label_separator = "="', 'label_separator = ","')],
        ["links[indicator].lines.label_separator = ','|no comma"],
    ),
    (
        "separator inside the line end",
        A,
        [('separator = ","', 'separator = "\\n"')],
        ["links[main].lines.separator = '\\n'|no character of line_end"],
    ),
    (
        "label separator equals separator",
        C,
        [('label_separator = "="', 'label_separator = " "')],
        ["links[indicator].lines.label_separator = ' '|another text than separator"],
    ),
    (
        "line end inside the prefix",
        A,
        [('prefix = "D"', 'prefix = "D\\r"')],
        ["links[main].lines.prefix = 'D\\r'|no character of line_end"],
    ),
    (
        "modulus without counter",
        A,
        [("counter_column = 1\n", "")],
        ["links[main].lines.counter_column = (missing)|needed because counter_modulus"],
    ),
    (
        "time without unit",
        A,
        [("counter_column = 1\n", "counter_column = 1\ntime_column = 4\n")],
        ["links[main].lines.time_unit_s = (missing)|needed because time_column"],
    ),
    (
        "unit without time",
        A,
        [("counter_column = 1\n", "counter_column = 1\ntime_unit_s = 0.001\n")],
        ["links[main].lines.time_column = (missing)|needed because time_unit_s"],
    ),
    (
        "counter and time in one column",
        A,
        [("counter_column = 1\n", "counter_column = 1\ntime_column = 1\ntime_unit_s = 1e-3\n")],
        ["links[main].lines.time_column = 1|another column than counter_column"],
    ),
    (
        "umlaut on the wire",
        A,
        [('prefix = "D"', 'prefix = "Ü"')],
        ["links[main].lines.prefix = 'Ü'|plain ASCII"],
    ),
    (
        "umlaut in the start command",
        A,
        [("rate_hz = 1000.0", 'rate_hz = 1000.0\nstart_command = "Ü"')],
        ["links[main].start_command = 'Ü'|plain ASCII"],
    ),
    (
        "column beyond the row",
        A,
        [('prefix = "D"', 'prefix = "D"\ncolumns = 2')],
        ["channels[crosshead].column = 3|at most 2, the columns of a row of link 'main'"],
    ),
    (
        "counter beyond the row",
        A,
        [('prefix = "D"', 'prefix = "D"\ncolumns = 3'), ("counter_column = 1", "counter_column = 4")],
        ["links[main].lines.counter_column = 4|at most 3"],
    ),
    # --- links: packets ---
    (
        "umlaut at the end of a reply",
        B,
        [('reply_line_end = "\\r\\n"', 'reply_line_end = "Ü"')],
        ["links[main].packets.reply_line_end = 'Ü'|plain ASCII"],
    ),
    (
        "two packet fields of one name",
        B,
        [('name = "status", number', 'name = "position", number')]
        + [('field = "status"', 'field = "position"')] * 6,
        ["links[main].packets.fields = (a list of 4)|its own name"],
    ),
    (
        "counter field unknown",
        B,
        [('counter_field = "counter"', 'counter_field = "count"')],
        ["links[main].packets.counter_field = 'count'|choose one of counter, force, position, status"],
    ),
    (
        "signed counter",
        B,
        [('"counter", number = "uint16"', '"counter", number = "int16"')],
        ["links[main].packets.counter_field = 'counter'|unsigned"],
    ),
    (
        "time field without unit",
        B,
        [('counter_field = "counter"', 'time_field = "counter"')],
        ["links[main].packets.time_unit_s = (missing)|needed because time_field"],
    ),
    (
        "counter and time in one field",
        B,
        [
            (
                'counter_field = "counter"',
                'counter_field = "counter"\ntime_field = "counter"\ntime_unit_s = 1e-3',
            )
        ],
        ["links[main].packets.time_field = 'counter'|another field"],
    ),
    (
        "unit without time field",
        B,
        [('counter_field = "counter"', 'counter_field = "counter"\ntime_unit_s = 1e-3')],
        ["links[main].packets.time_field = (missing)|needed because time_unit_s"],
    ),
    (
        "reply sync begins like sync",
        B,
        [('reply_sync = "b66b"', 'reply_sync = "A55A01"')],
        ["links[main].packets.reply_sync = 'A55A01'|do not begin like sync"],
    ),
    # --- links: rate, silence, speed ---
    (
        "silence below two periods",
        C,
        [('dialect = "lines"', 'dialect = "lines"\nsilence_s = 0.19')],
        ["links[indicator].silence_s = 0.19|at least 2 periods of 10 Hz = 0.2 s"],
    ),
    (
        "speed that cannot carry the rate",
        A,
        [("speed_baud = 460800", "speed_baud = 115200")],
        ["links[main].speed_baud = 115200|26 bytes x 10 bits x 1000 rows/s = 260000 bit/s: set 460800 baud"],
    ),
    (
        "twelve bits a byte",
        A,
        [("speed_baud = 460800", 'speed_baud = 230400\nparity = "even"\nstop_bits = 2')],
        ["links[main].speed_baud = 230400|26 bytes x 12 bits x 1000 rows/s = 312000 bit/s"],
    ),
    (
        "no speed is fast enough",
        A,
        [("rate_hz = 1000.0", "rate_hz = 60000.0")],
        ["links[main].speed_baud = 460800|lower rate_hz below 1772 rows/s"],
    ),
    (
        "row longer than the line limit",
        A,
        [('checksum = "sum8"', 'checksum = "sum8"\nline_bytes_max = 25')],
        ["links[main].lines.line_bytes_max = 25|at least 26 bytes"],
    ),
    # --- channels ---
    (
        "no force channel",
        A,
        [('role = "force"\nunit = "N"', 'role = "other"\nunit = "N"')],
        ["channels = (a list with 0"],
    ),
    (
        "two force channels",
        A,
        [extra("force", "N")],
        ["channels = (a list with 2 force channels)|exactly one"],
    ),
    (
        "two position channels",
        A,
        [extra("position", "mm")],
        ["channels = (a list with 2 position|at most one"],
    ),
    (
        "force in mm",
        A,
        [('unit = "N"', 'unit = "mm"')],
        ["channels[force].unit = 'mm'|'N' for a channel of role 'force'"],
    ),
    (
        "scale of zero",
        A,
        [("scale = 0.0001 ", "scale = 0.0 ")],
        ["channels[crosshead].scale = 0.0|any number but 0"],
    ),
    (
        "rails in the wrong order",
        A,
        [("counts_max = 500000.0", "counts_max = -500000.0")],
        ["channels[crosshead].counts_max = -500000.0|above counts_min"],
    ),
    (
        "rails below the verified range",
        A,
        [("counts_max = 75000.0", "counts_max = 62000.0")],
        ["channels[force].counts_max = 62000.0|verified maximum of 1000 N, not only 992 N"],
    ),
    (
        "rails of a channel that is turned round",
        A,
        [
            ("counts_max = 75000.0", "counts_max = 75000.0\nsign = -1"),
            ("counts_min = -75000.0", "counts_min = -62000.0"),
        ],
        ["channels[force].counts_min = -62000.0|verified maximum"],
    ),
    (
        "link unknown",
        A,
        [('link = "main"\nrole = "force"', 'link = "mian"\nrole = "force"')],
        ["channels[force].link = 'mian'|choose one of main"],
    ),
    (
        "no column",
        A,
        [("column = 2\n", "")],
        ["channels[force].column = (missing)|exactly one of column and label"],
    ),
    (
        "column and label",
        C,
        [('label = "F"', 'label = "F"\ncolumn = 1')],
        ["channels[force].column = 1|exactly one of column and label"],
    ),
    (
        "label without label separator",
        A,
        [("column = 2\n", 'label = "F"\n')],
        ["channels[force].label = 'F'|has no label_separator"],
    ),
    (
        "field in text",
        A,
        [("column = 2\n", 'column = 2\nfield = "x"\n')],
        ["channels[force].field = 'x'|not used"],
    ),
    (
        "column in packets",
        B,
        [('field = "force"', 'field = "force"\ncolumn = 1')],
        ["channels[force].column = 1|not used"],
    ),
    (
        "label in packets",
        B,
        [('field = "force"', 'field = "force"\nlabel = "F"')],
        ["channels[force].label = 'F'|not used"],
    ),
    (
        "field missing",
        B,
        [('field = "force"', "")],
        ["channels[force].field = (missing)|choose one of force, position"],
    ),
    (
        "field is the counter",
        B,
        [('field = "force"', 'field = "counter"')],
        ["channels[force].field = 'counter'|data fields"],
    ),
    (
        "column is the counter",
        A,
        [("column = 2\n", "column = 1\n")],
        ["channels[force].column = 1|another column than counter"],
    ),
    (
        "two channels in one column",
        A,
        [("column = 3\n", "column = 2\n")],
        ["channels[crosshead].column = 2|'force' has this"],
    ),
    (
        "two channels of one name",
        A,
        [('name = "crosshead"', 'name = "force"')],
        ["channels[force].name = 'force'|of its own"],
    ),
    # --- status inputs ---
    (
        "input twice",
        A,
        [(INPUT, INPUT + INPUT)],
        ["inputs[shield_open].name = 'shield_open'|a name of its own"],
    ),
    (
        "one letter for two",
        A,
        [('letter = "E"', 'letter = "S"')],
        ["inputs[emergency_stop].letter = 'S'|'shield_open' has"],
    ),
    ("letter missing", A, [('letter = "E"', "")], ["inputs[emergency_stop].letter = (missing)|one letter"]),
    (
        "letter ignored",
        A,
        [('letters_ignored = "R"', 'letters_ignored = "RS"')],
        ["inputs[shield_open].letter = 'S'|not in"],
    ),
    (
        "reply without query",
        B,
        [('source = "column"\nfield = "status"\nbit = 0', 'source = "reply"\nletter = "S"')],
        ["inputs[shield_open].source = 'reply'|only with a status query"],
    ),
    (
        "modem on tcp",
        B,
        [('source = "column"\nfield = "status"\nbit = 0', 'source = "modem"\nline = "cts"')],
        ["inputs[shield_open].source = 'modem'|not a serial port"],
    ),
    (
        "modem without line",
        A,
        [('source = "reply"\nletter = "S"', 'source = "modem"')],
        ["inputs[shield_open].line = (missing)|one of 'cts'"],
    ),
    (
        "letter with column",
        B,
        [("bit = 0", 'bit = 0\nletter = "S"')],
        ["inputs[shield_open].letter = 'S'|not used with source"],
    ),
    ("bit beyond the byte", B, [("bit = 0", "bit = 8")], ["inputs[shield_open].bit = 8|0 to 7"]),
    (
        "bit of a float",
        B,
        [('"status", number = "uint8"', '"status", number = "float32"')],
        [
            f"inputs[{name}].bit|no bit"
            for name in ("shield_open", "emergency_stop", "drive_fault", "end_up", "end_down")
        ]
        + ["inputs[moving].bit|no bit"],
    ),
    (
        "one bit for two",
        B,
        [("bit = 1", "bit = 0")],
        ["inputs[emergency_stop].bit = 0|'shield_open' has this one"],
    ),
    (
        "input field unknown",
        B,
        [('field = "status"\nbit = 0', 'field = "stat"\nbit = 0')],
        ["inputs[shield_open].field = 'stat'"],
    ),
    (
        "input link unknown",
        A,
        [('source = "reply"\nletter = "S"', 'source = "reply"\nletter = "S"\nlink = "aux"')],
        ["inputs[shield_open].link = 'aux'|choose one of main"],
    ),
    (
        "input column missing in text",
        A,
        [('source = "reply"\nletter = "S"', 'source = "column"')],
        ["inputs[shield_open].column = (missing)|exactly one"],
    ),
    # --- motion ---
    (
        "motion link unknown",
        A,
        [('[motion]\nlink = "main"', '[motion]\nlink = "aux"')],
        ["motion.link = 'aux'|choose one of main"],
    ),
    (
        "speed range upside down",
        A,
        [("speed_mm_min_max = 60.0", "speed_mm_min_max = 0.01")],
        ["motion.speed_mm_min_max = 0.01|above speed_mm_min_min = 0.05 mm/min"],
    ),
    (
        "approach too fast",
        A,
        [("approach_mm_min = 5.0", "approach_mm_min = 61.0")],
        ["motion.approach_mm_min = 61.0|0.05 to 60 mm/min"],
    ),
    (
        "return too slow",
        A,
        [("return_mm_min = 20.0", "return_mm_min = 0.01")],
        ["motion.return_mm_min = 0.01|0.05 to 60 mm/min"],
    ),
    (
        "travel upside down",
        A,
        [("travel_mm_max = 15.0", "travel_mm_max = -40.0")],
        ["motion.travel_mm_max = -40.0|above travel_mm_min"],
    ),
    (
        "gap beyond the travel",
        A,
        [("gap_mm = 2.0", "gap_mm = 45.0")],
        ["motion.gap_mm = 45.0|less than the whole travel of 45 mm"],
    ),
    (
        "back-off beyond the travel",
        A,
        [("backoff_mm = 2.0", "backoff_mm = 50.0")],
        ["motion.backoff_mm = 50.0|whole travel"],
    ),
    (
        "keep-alive too rare",
        A,
        [("every_s = 0.1\nlapse_s", "every_s = 0.3\nlapse_s")],
        ["motion.keep_alive.every_s = 0.3|half of lapse_s"],
    ),
    (
        "number in the stop",
        A,
        [('send = "S"', 'send = "S{speed_mm_min}"')],
        ["motion.stop.send|no placeholder in this command"],
    ),
    (
        "start without speed",
        A,
        [('send = "V{speed_mm_min:+.3f}"', 'send = "V"')],
        ["motion.start.send = 'V'|{speed_mm_min} somewhere"],
    ),
    (
        "start with a distance",
        A,
        [('send = "V{speed_mm_min:+.3f}"', 'send = "V{speed_mm_min:+.3f},{distance_mm}"')],
        ["motion.start.send|only {speed_mm_min} in this command: remove {distance_mm}"],
    ),
    (
        "unknown placeholder",
        A,
        [("{rate_n_s:+.3f}", "{rate}")],
        ["motion.force_rate.send|remove {rate}", "motion.force_rate.send|{rate_n_s}"],
    ),
    (
        "broken braces",
        A,
        [("{rate_n_s:+.3f}", "{rate_n_s:+.3f")],
        ["motion.force_rate.send|placeholders such as"],
    ),
    (
        "bad number format",
        A,
        [("{rate_n_s:+.3f}", "{rate_n_s:q}")],
        ["motion.force_rate.send|placeholders such as"],
    ),
    (
        "attribute access",
        A,
        [("{rate_n_s:+.3f}", "{rate_n_s.real}")],
        ["motion.force_rate.send|placeholders such as"],
    ),
    ("conversion", A, [("{rate_n_s:+.3f}", "{rate_n_s!r}")], ["motion.force_rate.send|placeholders such as"]),
    (
        "positional placeholder",
        A,
        [("{rate_n_s:+.3f}", "{0}")],
        ["motion.force_rate.send|placeholders such as"],
    ),
    (
        "nested placeholder",
        A,
        [("{rate_n_s:+.3f}", "{rate_n_s:{distance_mm}}")],
        ["motion.force_rate.send|placeholders such as"],
    ),
    (
        "two commands alike",
        A,
        [('send = "K"', 'send = "S"')],
        ["motion.keep_alive.send = 'S'|another text than motion.stop.send"],
    ),
    (
        "line end in a command",
        A,
        [('send = "K"', 'send = "K\\r\\n"')],
        ["motion.keep_alive.send = 'K\\r\\n'|added by itself"],
    ),
    ("umlaut in a command", A, [('send = "K"', 'send = "Ä"')], ["motion.keep_alive.send = 'Ä'|plain ASCII"]),
    (
        "umlaut in a reply",
        A,
        [('reply = "OK K"', 'reply = "ÄK"')],
        ["motion.keep_alive.reply = 'ÄK'|plain ASCII"],
    ),
    (
        "reply like a row",
        A,
        [('reply = "OK K"', 'reply = "DK"')],
        ["motion.keep_alive.reply = 'DK'|does not begin with 'D'"],
    ),
    (
        "reply like a row without prefix",
        A,
        [('prefix = "D"', 'prefix = ""'), ('reply = "OK K"', 'reply = "0"')],
        ["motion.keep_alive.reply = '0'|a digit or a sign"],
    ),
    (
        "reply like the status word",
        A,
        [('reply = "OK K"', 'reply = "ST"')],
        ["motion.keep_alive.reply = 'ST'|not confused"],
    ),
    (
        "replies on packets without reply sync",
        B,
        [('reply_sync = "b66b"', "")],
        [
            f"motion.{key}.reply|has no reply_sync"
            for key in ("start", "stop", "jog", "retreat", "force_rate", "keep_alive")
        ],
    ),
    (
        "start command that moves",
        A,
        [("speed_baud = 460800", 'speed_baud = 460800\nstart_command = "V+1.000"')],
        ["links[main].start_command = 'V+1.000'|cannot move the frame"],
    ),
    # --- cell ---
    (
        "verified range upside down",
        A,
        [("verified_min_n = 10.0", "verified_min_n = 1000.0")],
        ["cell.verified_min_n = 1000.0|less than"],
    ),
    (
        "verified beyond the capacity",
        A,
        [("verified_max_n = 1000.0", "verified_max_n = 1100.0")],
        ["cell.verified_max_n = 1100.0|at most the capacity of 1000 N"],
    ),
    (
        "due before verified",
        A,
        [("verified_due = 2046-01-15", "verified_due = 2026-01-15")],
        ["cell.verified_due = 2026-01-15|a day after verified_on"],
    ),
    (
        "zero beyond the capacity",
        A,
        [("zero_balance_n = 2.4", "zero_balance_n = -1000.0")],
        ["cell.zero_balance_n = -1000.0|less than"],
    ),
    # --- fixtures ---
    (
        "load span not below the support span",
        A,
        [("load_span_mm = 20.0", "load_span_mm = 40.0")],
        ["fixtures[quarter-40-20].load_span_mm = 40.0|> 0 and less than support_span_mm = 40 mm"],
    ),
    (
        "4-point without load span",
        A,
        [("load_span_mm = 20.0\n", "")],
        ["fixtures[quarter-40-20].load_span_mm = (missing)|> 0"],
    ),
    (
        "3-point with load span",
        A,
        [
            (
                'geometry = "3-point"\nsupport_span_mm = 40.0',
                'geometry = "3-point"\nsupport_span_mm = 40.0\nload_span_mm = 20.0',
            )
        ],
        ["fixtures[three-40].load_span_mm = 20.0|0 mm for a 3-point fixture"],
    ),
    (
        "rollers that touch",
        A,
        [("roller_diameter_mm = 4.5", "roller_diameter_mm = 20.0")],
        ["fixtures[quarter-40-20].roller_diameter_mm = 20.0|less than 20 mm"],
    ),
    (
        "uncertainty as large as the span",
        A,
        [("support_span_u_mm = 0.1", "support_span_u_mm = 40.0")],
        ["fixtures[quarter-40-20].support_span_u_mm = 40.0|half the support span"],
    ),
    (
        "two fixtures of one name",
        A,
        [('name = "three-14"', 'name = "three-40"')],
        ["fixtures[three-40].name|a name of its own"],
    ),
    # --- compliance ---
    (
        "fixture unknown",
        A,
        [('fixture = "quarter-40-20"', 'fixture = "half"')],
        ["compliance.fixture = 'half'|one of the fixtures"],
    ),
    (
        "another cell",
        A,
        [('cell_serial = "KL-CELL-0417"', 'cell_serial = "X"')],
        ["compliance.cell_serial = 'X'|voids the table"],
    ),
    (
        "force falls",
        A,
        [("force_n = 200.0", "force_n = 100.0")],
        ["compliance.points[#3].force_n = 100.0|more than 100 N"],
    ),
    (
        "deflection falls",
        A,
        [("deflection_um = 20.0", "deflection_um = 9.0")],
        ["compliance.points[#3].deflection_um = 9.0|at least 10 um"],
    ),
    (
        "force beyond the capacity",
        A,
        [("force_n = 800.0", "force_n = 8000.0")],
        ["compliance.points[#9].force_n = 8000.0|at most the capacity"],
    ),
]


@pytest.mark.parametrize(("name", "card", "edits", "expected"), RULES, ids=[rule[0] for rule in RULES])
def test_one_change_gives_exactly_these_faults(problems, name, card, edits, expected):
    lines = problems(card, *edits)
    assert len(lines) == len(expected), lines
    for line, wanted in zip(lines, expected, strict=True):
        start, _, part = wanted.partition("|")
        assert line.startswith(start), line
        assert part in line, line


def test_a_flat_compliance_table_is_refused(problems):
    flat = [(f"deflection_um = {force / 10:.1f}", "deflection_um = 5.0") for force in range(0, 900, 100)]
    (line,) = problems(A, *flat)
    assert line.startswith("compliance.points = (a list of 9)"), line


@pytest.mark.parametrize("card", [A, B, C, "kiln-lane-demo.toml"])
def test_the_examples_have_no_fault(problems, card):
    assert problems(card) == ()


# Changes at the edge of a rule that must not be refused.
ALLOWED = [
    (A, [('prefix = "D"', 'prefix = "D"\ncolumns = 3')]),
    (A, [("every_s = 0.1\nlapse_s", "every_s = 0.25\nlapse_s")]),
    (C, [('dialect = "lines"', 'dialect = "lines"\nsilence_s = 0.2')]),
    (A, [("verified_min_n = 10.0", "verified_min_n = 0.0")]),
    (A, [("approach_mm_min = 5.0", "approach_mm_min = 60.0")]),
    (A, [("speed_baud = 460800", "speed_baud = 260000")]),
    (A, [("roller_diameter_mm = 4.5", "roller_diameter_mm = 19.9")]),
    (A, [("{rate_n_s:+.3f}", "{{x}}{rate_n_s}")]),
    (A, [("deflection_um = 20.0", "deflection_um = 10.0")]),
    (B, [('reply_sync = "b66b"', 'reply_sync = "a56b"')]),
    (B, [("bit = 0", "bit = 7")]),
    (A, [('prefix = "D"', 'prefix = ""')]),
    (A, [("speed_baud = 460800", 'speed_baud = 460800\nstart_command = "GO"')]),
]


@pytest.mark.parametrize(("card", "edits"), ALLOWED)
def test_the_edge_of_a_rule_is_allowed(problems, card, edits):
    assert problems(card, *edits) == ()
