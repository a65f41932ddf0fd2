"""The sheet: what stands where a key is left out, what follows from it, and every refusal with its words."""

from __future__ import annotations

from pathlib import Path

import pytest

from decode.errors import InputError
from decode.sheet import (
    KEYS_OF_SOME,
    KNOWN_FIELDS,
    LONGEST_FRAME,
    Field,
    Incremental,
    Serial,
    Sheet,
    from_toml,
    index_levels,
    load,
)


def serial(fields: str, keys: str = 'interface = "ssi"') -> str:
    """A sheet of one serial part; the fields stand from its line 4 on."""
    return f"[serial]\n{keys}\nfields = [\n{fields}\n]\n"


def refused(text: str) -> InputError:
    with pytest.raises(InputError) as refusal:
        from_toml(text, file="board.toml")
    return refusal.value


POSITION = '{ name = "position", bits = 12 }'

WRONG_KIND = [
    (serial(POSITION, 'interface = "bis"'), "serial.interface", "'bis'", '"ssi" or "biss-c" or "spi"', "'biss-c'"),
    (serial(POSITION, "interface = 3"), "serial.interface", "3", '"ssi" or "biss-c" or "spi"', None),
    (serial('{ name = "a", bits = "3" }'), "serial.fields[0].bits", "'3'", "a whole number", None),
    (serial('{ name = "a", bits = 3.0 }'), "serial.fields[0].bits", "3.0", "a whole number", None),
    (serial('{ name = "a", bits = true }'), "serial.fields[0].bits", "true", "a whole number", None),
    (serial("{ name = 5, bits = 3 }"), "serial.fields[0].name", "5", "a text in double quotes", None),
    (
        serial(f'{POSITION},\n{{ name = "crc", bits = 6, inverted = 1 }}'),
        "serial.fields[1].inverted",
        "1",
        "true or false",
        None,
    ),
    (
        serial('{ name = "error", bits = 1, active = "lo" }'),
        "serial.fields[0].active",
        "'lo'",
        '"low" or "high"',
        "'low'",
    ),
    (serial('{ name = "crc", bits = 6, covers = "a" }'), "serial.fields[0].covers", "'a'", "a list", None),
    (
        serial('{ name = "crc", bits = 6, covers = [1] }'),
        "serial.fields[0].covers[0]",
        "1",
        "a text in double quotes",
        None,
    ),
    (serial("1"), "serial.fields[0]", "1", "a part with keys of its own", None),
    ('[serial]\ninterface = "ssi"\nfields = "x"', "serial.fields", "'x'", "a list", None),
    ("[[serial]]\ninterface = 1", "serial", "[{'interface': 1}]", "a part with keys of its own", None),
    ("board = 3", "board", "3", "a part with keys of its own", None),
    ("lines = 3", "lines", "3", "a part with keys of its own", None),
    ("[board]\nname = 3", "board.name", "3", "a text in double quotes", None),
    ('[capture]\nsample_rate_hz = "1e6"', "capture.sample_rate_hz", "'1e6'", "a number", None),
    ("[capture]\nsample_rate_hz = 1979-05-27", "capture.sample_rate_hz", "1979-05-27", "a number", None),
    ("[capture]\nthreshold_v = 1.0", "capture.threshold_v", "1.0", "a list of 2", None),
    ("[capture]\nthreshold_v = [1.0]", "capture.threshold_v", "[1.0]", "a list of 2", None),
    ('[capture]\nthreshold_v = [1.0, "a"]', "capture.threshold_v[1]", "'a'", "a number", None),
    ('[capture]\ntime_unit = "m"', "capture.time_unit", "'m'", '"s" or "ms" or "us" or "ns" or "ps"', "'ms'"),
    ('[lines]\ndata = "D"\nclock = [1]', "lines.clock", "[1]", "a text in double quotes or a whole number", None),
    ('[lines]\n"a.b" = 1.5', "lines.a.b", "1.5", "a text in double quotes or a whole number", None),
    ("[incremental]\ndirection = 2", "incremental.direction", "2", "1 or -1", None),
    ('[incremental]\ndirection = "up"', "incremental.direction", "'up'", "1 or -1", None),
    ("[incremental]\ncycles_per_turn = 0.5", "incremental.cycles_per_turn", "0.5", "a whole number", None),
    ("[limits]\nspeed_rpm = 3", "limits.speed_rpm", "3", "a list of 2", None),
    ('[limits]\nspeed_rpm = [1, "non"]', "limits.speed_rpm[1]", "'non'", 'a number or "none"', "'none'"),
    ("[limits]\nspeed_rpm = [true, 1]", "limits.speed_rpm[0]", "true", 'a number or "none"', None),
]


@pytest.mark.parametrize(("text", "path", "found", "expected", "nearest"), WRONG_KIND)
def test_a_value_of_the_wrong_kind(text: str, path: str, found: str, expected: str, nearest: str | None) -> None:
    """Says where, what stands there and what was expected, in our words."""
    refusal = refused(text)
    assert refusal.problem == "a value of the wrong kind"
    assert (refusal.column, refusal.found, refusal.expected) == (path, found, expected)
    assert refusal.hint == (None if nearest is None else f"did you mean {nearest}?")


@pytest.mark.parametrize(
    ("text", "row", "path", "key", "nearest"),
    [
        ("[board]\nnam = 'x'", 2, "board.nam", "nam", "name"),
        ("[boards]\nname = 'x'", 1, "boards", "boards", "board"),
        ("\n[capture]\ntreshold_v = [1, 2]", 3, "capture.treshold_v", "treshold_v", "threshold_v"),
        ("[incremental]\nDirection = 1", 2, "incremental.Direction", "Direction", "direction"),
        (serial(f"{POSITION},\n{{ name = 'a', bit = 1 }}"), 5, "serial.fields[1].bit", "bit", "bits"),
        (serial(POSITION, "interface = 'spi'\nzzz = 1"), 3, "serial.zzz", "zzz", None),
    ],
)
def test_an_unknown_key(text: str, row: int, path: str, key: str, nearest: str | None) -> None:
    refusal = refused(text)
    assert refusal.problem == f"unknown key {key!r}"
    assert (refusal.row, refusal.column, refusal.found) == (row, path, key)
    assert refusal.hint == (f"did you mean {nearest!r}?" if nearest else "remove the key")


@pytest.mark.parametrize(
    ("text", "path", "key"),
    [
        ("[serial]\ninterface = 'ssi'", "serial", "fields"),
        ("[serial]\nfields = []", "serial", "interface"),
        (serial("{ name = 'position' }"), "serial.fields[0]", "bits"),
        (serial(f"{POSITION},\n{{ bits = 3 }}"), "serial.fields[1]", "name"),
    ],
)
def test_a_key_that_is_missing(text: str, path: str, key: str) -> None:
    refusal = refused(text)
    assert (refusal.problem, refusal.column) == (f"the key {key!r} is missing", path)
    assert refusal.expected == f"{key} = ..."


LINES = "[lines]\nclock = 'C'\ndata = 'D'\n"
CRC = "{ name = 'position', bits = 12 },\n{ name = 'crc', bits = 6, polynomial = 0x43 %s }"

IMPOSSIBLE = [
    (serial(""), "serial.fields", "a word without fields"),
    (serial(POSITION, "interface = 'spi'\nmode = 4"), "serial.mode", "no such mode"),
    (serial(POSITION, "interface = 'spi'\nmode = -1"), "serial.mode", "no such mode"),
    (serial(POSITION, "interface = 'ssi'\nframe_rate_hz = 0"), "serial.frame_rate_hz", "an impossible rate"),
    (serial(POSITION, "interface = 'ssi'\nframe_rate_hz = inf"), "serial.frame_rate_hz", "an impossible rate"),
    (serial(POSITION, "interface = 'ssi'\nframe_rate_hz = nan"), "serial.frame_rate_hz", "an impossible rate"),
    (serial(POSITION, "interface = 'ssi'\ncopies = 0"), "serial.copies", "only ssi can send one word more than once"),
    (serial(POSITION, "interface = 'spi'\ncopies = 2"), "serial.copies", "only ssi can send one word more than once"),
    (
        serial(POSITION, "interface = 'ssi'\ncopies = 2\nseparator_bits = 0"),
        "serial.separator_bits",
        "copies need a separator",
    ),
    (serial(POSITION, "interface = 'ssi'\ncopies = 40"), "serial.fields", "a burst of 519 bits"),
    (serial("{ name = 'a-b', bits = 3 }"), "serial.fields[0].name", "not a name"),
    (
        serial("{ name = 'Position', bits = 3 }"),
        "serial.fields[0].name",
        "unknown name 'Position'; did you mean 'position'?",
    ),
    (serial(f"{POSITION},\n{POSITION}"), "serial.fields[0].name", "two fields named 'position'"),
    (serial("{ name = 'a', bits = 0 }"), "serial.fields[0].bits", "an impossible width"),
    (serial("{ name = 'a', bits = 65 }"), "serial.fields[0].bits", "an impossible width"),
    (
        serial("{ name = 'turns', bits = 32 },\n{ name = 'position', bits = 32 }"),
        "serial.fields",
        "turns and position are too wide together",
    ),
    (
        serial("{ name = 'a', bits = 3 }", "interface = 'ssi'\ncoding = 'gray'"),
        "serial.coding",
        "gray without a position",
    ),
    (
        serial("{ name = 'position', bits = 12 },\n{ name = 'crc', bits = 6 }"),
        "serial.fields[1]",
        "a crc without its polynomial",
    ),
    (
        serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 6, polynomial = -1 }"),
        "serial.fields[1].polynomial",
        "a negative polynomial",
    ),
    (
        serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 6, polynomial = 0x03 }"),
        "serial.fields[1].polynomial",
        "a polynomial of degree 1 in a field of 6 bits",
    ),
    (
        serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 2, polynomial = 0x7 }"),
        "serial.fields[1].bits",
        "a CRC of this width is not supported",
    ),
    (serial(CRC % ", init = 64"), "serial.fields[1].init", "does not fit into the field"),
    (serial(CRC % ", output_xor = -1"), "serial.fields[1].output_xor", "does not fit into the field"),
    (serial(CRC % ", reflected = true"), "serial.fields[1].reflected", "a reflected CRC over 12 bits"),
    (
        serial(CRC % ", covers = ['positon']"),
        "serial.fields[1].covers",
        "no field named 'positon'; did you mean 'position'?",
    ),
    (serial(CRC % ", covers = ['position', 'crc']"), "serial.fields[1].covers", "a check that covers itself"),
    (serial(CRC % ", covers = []"), "serial.fields[1]", "a check that covers nothing"),
    (serial("{ name = 'parity', bits = 1 }"), "serial.fields[0]", "a check that covers nothing"),
    (serial(f"{POSITION},\n{{ name = 'parity', bits = 2 }}"), "serial.fields[1].bits", "a parity of more than one bit"),
    (
        serial(f"{POSITION},\n{{ name = 'parity', bits = 1, mask = 0x1000 }}"),
        "serial.fields[1].mask",
        "a mask that does not fit the covered fields",
    ),
    (
        serial(f"{POSITION},\n{{ name = 'parity', bits = 1, mask = 0 }}"),
        "serial.fields[1].mask",
        "a mask that does not fit the covered fields",
    ),
    (serial("{ name = 'fixed', bits = 2 }"), "serial.fields[0]", "a fixed field without its value"),
    (serial("{ name = 'fixed', bits = 2, value = 4 }"), "serial.fields[0].value", "does not fit into the field"),
    (
        serial("{ name = 'check', bits = 6, polynomial = 0x43 }"),
        "serial.fields[0].polynomial",
        "a field named 'check' has no polynomial",
    ),
    (
        serial("{ name = 'position', bits = 6, active = 'low' }"),
        "serial.fields[0].active",
        "a field named 'position' has no active",
    ),
    ("[lines]\nclk = 'C'", "lines.clk", "unknown role 'clk'; did you mean 'clock'?"),
    ("[lines]\nzzz = 'C'", "lines.zzz", "unknown role 'zzz'"),
    ("[lines]\nclock = 0", "lines.clock", "columns are numbered from 1"),
    ("[lines]\na_n = 'C'", "lines.a_n", "a complement without its line 'a'"),
    (f"[lines]\nclock = 'C'\n{serial(POSITION)}", "lines", "[serial] needs the line 'data'"),
    ("[lines]\na = 'A'\n[incremental]\n", "lines", "[incremental] needs the line 'b'"),
    ("[capture]\nsample_rate_hz = 0", "capture.sample_rate_hz", "an impossible sample rate"),
    ("[capture]\nsample_rate_hz = 1e13", "capture.sample_rate_hz", "an impossible sample rate"),
    ("[capture]\nthreshold_v = [2, 1]", "capture.threshold_v", "the thresholds are the wrong way round"),
    ("[incremental]\ncycles_per_turn = 0", "incremental.cycles_per_turn", "an impossible resolution"),
    ("[incremental]\ncycles_per_turn = 1000000001", "incremental.cycles_per_turn", "an impossible resolution"),
    ("[incremental]\nindex_width_counts = 0", "incremental.index_width_counts", "an impossible width"),
    ("[incremental]\nindex_width_counts = inf", "incremental.index_width_counts", "an impossible width"),
    ("[incremental]\nindex_states = 'a=2'", "incremental.index_states", "not an A/B state"),
    ("[limits]\nspeed_rmp = [0, 1]", "limits.speed_rmp", "no measurement named 'speed_rmp'; did you mean 'speed_rpm'?"),
    ("[limits]\nspeed_rpm = [2, 1]", "limits.speed_rpm", "the limits are the wrong way round"),
    ("[limits]\nspeed_rpm = [nan, 1]", "limits.speed_rpm", "a limit that is no number"),
]


@pytest.mark.parametrize(("text", "path", "problem"), IMPOSSIBLE)
def test_a_value_that_cannot_be(text: str, path: str, problem: str) -> None:
    """Every one says what would be right."""
    refusal = refused(text)
    assert (refusal.column, refusal.problem) == (path, problem)
    assert refusal.expected


LARGEST = [
    serial(POSITION, "interface = 'spi'\nmode = 3"),
    serial(POSITION, f"interface = 'ssi'\ncopies = 2\nseparator_bits = {LONGEST_FRAME - 24}"),
    serial("{ name = 'a', bits = 64 }"),
    serial("{ name = 'turns', bits = 31 },\n{ name = 'position', bits = 32 }"),
    serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 3, polynomial = 0xB, init = 7, output_xor = 7 }"),
    serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 3, polynomial = 0xB, reflected = true }"),
    serial("{ name = 'a', bits = 8 },\n{ name = 'crc', bits = 32, polynomial = 0x104C11DB7 }"),
    serial(f"{POSITION},\n{{ name = 'parity', bits = 1, mask = 0xFFF }}"),
    serial("{ name = 'fixed', bits = 2, value = 3 }"),
    "[capture]\nsample_rate_hz = 9.99e12\nthreshold_v = [1, 1]",
    "[incremental]\ncycles_per_turn = 1000000000",
    "[limits]\nspeed_rpm = [1, 1]",
    "[lines]\nclock = 1\n",
]


@pytest.mark.parametrize("text", LARGEST)
def test_one_step_inside_each_bound_is_taken(text: str) -> None:
    assert from_toml(text) != Sheet()


def test_broken_toml_is_told_with_its_line() -> None:
    refusal = refused("[board]\nname = Larkspur\n")
    assert (refusal.problem, refusal.row) == ("the sheet is not valid TOML", 2)


def test_a_long_value_is_cut_short() -> None:
    """A whole list of fields would fill the screen."""
    shown = refused(serial(",\n".join(f"{{ name = 'spare_{i}', bits = 64 }}" for i in range(9)))).found
    assert shown is not None
    assert len(shown) <= 103
    assert shown.endswith("...")


@pytest.mark.parametrize(
    ("text", "row"),
    [
        (serial("{ name = 'a', bits = 1 },\n{ name = 'b', bits = 0 }"), 5),
        ("# a board\n\n[incremental]\n\ncycles_per_turn = 0", 5),
        ("incremental = { cycles_per_turn = 0 }", 1),
        ("incremental.cycles_per_turn = 0", 1),
    ],
)
def test_the_line_in_the_file(text: str, row: int) -> None:
    assert refused(text).row == row


def test_files(tmp_path: Path) -> None:
    """A mark at the start of a UTF-8 file is no part of it; a file that is not there or not text is refused."""
    board = tmp_path / "board.toml"
    board.write_bytes(b"\xef\xbb\xbf[board]\nname = 'Larkspur'\n")
    assert load(board).board.name == "Larkspur"
    board.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="the sheet cannot be read"):
        load(board)
    with pytest.raises(InputError, match="there is no such sheet"):
        load(tmp_path / "none.toml")


# ---- what stands where a key is left out --------------------------------------------------------------------------


def test_an_empty_sheet_says_nothing() -> None:
    sheet = from_toml("")
    assert (sheet.board.name, sheet.lines, sheet.serial, sheet.incremental, sheet.limits) == ("", {}, None, None, {})
    capture = sheet.capture
    assert (capture.sample_rate_hz, capture.time_unit, capture.threshold_v) == (None, None, None)


def test_defaults_of_the_serial_part() -> None:
    part = from_toml(serial(POSITION)).serial
    assert part is not None
    assert (part.mode, part.coding, part.frame_rate_hz, part.copies, part.separator_bits) == (0, "binary", None, 1, 1)
    (field,) = part.fields
    assert (field.active, field.kind, field.value, field.polynomial) == (None, "even", None, None)
    assert (field.init, field.inverted, field.output_xor, field.reflected) == (0, False, 0, False)
    assert (field.covers, field.mask) == (None, None)


def test_defaults_of_the_incremental_part() -> None:
    part = from_toml("[incremental]").incremental
    assert part == Incremental(cycles_per_turn=None, direction=1, index_width_counts=None, index_states=None)
    assert part is not None
    assert part.counts_per_turn is None


def test_four_counts_a_cycle() -> None:
    """Source: US Digital glossary, "Cycle"."""
    assert Incremental(cycles_per_turn=2500).counts_per_turn == 10_000


def test_limits_with_an_open_end() -> None:
    sheet = from_toml('[limits]\nspeed_rpm = ["none", 5]\nlatency_s = [0, "none"]\n')
    assert [sheet.limit(name) for name in ("speed_rpm", "latency_s", "phase_deg")] == [(None, 5.0), (0.0, None), None]


# ---- what follows from the fields ---------------------------------------------------------------------------------


def word(*names: str, interface: str = "ssi", **keys: int) -> Serial:
    fields = tuple(Field(name=name, bits=4) for name in names)
    return Serial(interface=interface, fields=fields, **keys)  # type: ignore[arg-type]


def test_a_check_covers_what_was_sent_before_it() -> None:
    """Or, sent first, all that follows; or what it says, wherever that stands."""
    fields = ("parity", "turns", "position", "crc")
    assert [word(*fields).covered(number) for number in (0, 3)] == [(1, 2, 3), (0, 1, 2)]
    told = Serial(interface="ssi", fields=(Field(name="crc", bits=4, covers=("b", "a")), *word("a", "x", "b").fields))
    assert told.covered(0) == (1, 3)


def test_columns_number_what_repeats() -> None:
    assert word("crc", "position", "crc", "fixed", "crc").columns() == ("crc", "position", "crc_2", "fixed", "crc_3")


def test_bits_of_a_burst() -> None:
    """Twice 25 bits and the separator between them: 51, and one clock more says 52. Source: ring transmission,
    TR-Electronic TR-ECE-BA-DGB-0131."""
    fields = (Field(name="turns", bits=12), Field(name="position", bits=13))
    assert Serial(interface="ssi", fields=fields).sent_bits == 25
    assert Serial(interface="ssi", fields=fields, copies=2).sent_bits == 51
    assert Serial(interface="ssi", fields=fields, copies=3, separator_bits=2).sent_bits == 79
    assert (Serial(interface="ssi", fields=fields).turns_bits, word("a").position_bits) == (12, 0)


@pytest.mark.parametrize(
    ("interface", "active", "level"),
    [("biss-c", None, 0), ("ssi", None, 1), ("spi", None, 1), ("biss-c", "high", 1), ("spi", "low", 0)],
)
def test_the_active_level_of_a_flag(interface: str, active: str | None, level: int) -> None:
    """BiSS sends its error and warning bits active low. Source: Renishaw L-9709-9005."""
    field = Field(name="error", bits=1, active=active)  # type: ignore[arg-type]
    assert word("error", interface=interface).active_level(field) == level


@pytest.mark.parametrize(
    ("text", "levels"),
    [
        ("a=1 b=0", (1, 0)),
        ("B=1, A=0", (0, 1)),
        ("a=1", (1, None)),
        ("b=0", (None, 0)),
        ("", None),
        ("a=1 a=0", None),
        ("c=1", None),
        ("a=2", None),
        ("a=1b=1", None),
    ],
)
def test_index_states(text: str, levels: tuple[int | None, int | None] | None) -> None:
    assert index_levels(text) == levels


def test_keys_of_some_fields_name_real_keys_and_fields() -> None:
    assert set(KEYS_OF_SOME) == set(Field.__struct_fields__) - {"name", "bits"}
    assert {name for names in KEYS_OF_SOME.values() for name in names} <= set(KNOWN_FIELDS)
