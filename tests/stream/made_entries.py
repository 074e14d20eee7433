"""Entries for tests: any number of them, each different, from a seed."""

from random import Random

from daq.stream.entry import Entry, Kind, Packed, pack_all

STREAM = 0xB35C_0000_0000_0011


def entries(first: int, count: int, rng: Random, payload_max: int = 200) -> list[Entry]:
    """`count` entries from number `first` on."""
    return [
        Entry(
            kind=rng.choice((Kind.RAW, Kind.BLOCK)),
            stream_id=STREAM,
            sequence=sequence,
            monotonic_ns=sequence * 1000,
            payload=rng.randbytes(rng.randint(0, payload_max)),
        )
        for sequence in range(first, first + count)
    ]


def packed(first: int, count: int, rng: Random, payload_max: int = 200) -> Packed:
    """The same as bytes."""
    return pack_all(entries(first, count, rng, payload_max))
