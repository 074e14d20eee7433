"""A recorder reduced to its loop, as a program: python killed_recorder.py RING JOURNAL. Made to be killed.

Prints one line per sync: the last acknowledged sequence. Ends by itself once the ring's writer has ended.
"""

import sys

from daq.stream.journal import Journal
from daq.stream.ring_reader import RingReader


def main(ring: str, folder: str) -> None:
    stream_id = RingReader(ring).stream_id
    journal = Journal.open(folder, stream_id, segment_bytes=1 << 16)
    reader = RingReader(ring, after_sequence=journal.last_sequence)
    while not reader.finished():
        while (piece := reader.read_packed(4096)) is not None:
            journal.append_packed(piece)
        acknowledged = journal.sync()
        reader.acknowledge(acknowledged, 1)
        sys.stdout.write(f"{acknowledged}\n")
        sys.stdout.flush()
    journal.close()


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2])
