"""The command `midspan`. `stop` is served here without any library, so that it leaves within a tenth of a second."""

from __future__ import annotations

import sys

STOP_HELP = """Usage: midspan stop [FRAME]

  Stop the crosshead of FRAME now (of every frame of this user when none is named).
  Goes straight to the bench process; works while the rest hangs. Not a safety
  function: use the hard-wired emergency stop whenever a person is at risk.

  Example: midspan stop kiln-lane-a
"""


def main() -> None:
    """Entry point of the console script."""
    if not __debug__:
        sys.exit("midspan: refuses to run under python -O: its assertions are part of the product")
    if not (3, 11) <= sys.version_info[:2] <= (3, 13):
        sys.exit(f"midspan: needs Python 3.11 to 3.13, this is {sys.version.split()[0]}")
    if len(sys.argv) > 1 and sys.argv[1] == "stop":
        sys.exit(stop(sys.argv[2:]))
    from daq.cli.root import midspan

    midspan()


def stop(words: list[str]) -> int:
    """0: every named frame answered; 1: one did not; 2: bad words."""
    if any(word in ("-h", "--help") for word in words):
        sys.stdout.write(STOP_HELP)
        return 0
    if len(words) > 1 or any(word.startswith("-") for word in words):
        sys.stderr.write("midspan stop: takes at most one frame name; see midspan stop --help\n")
        return 2
    from daq.station.stopline import running_frames, stop_frame

    frames = words or running_frames()
    if not frames:
        sys.stderr.write(
            "midspan stop: no frame is served by this user; use the emergency stop at the machine\n"
        )
        return 1
    code = 0
    for frame in frames:
        why = stop_frame(frame, "midspan stop")
        if why:
            sys.stderr.write(f"{frame}: {why} - USE THE EMERGENCY STOP AT THE MACHINE\n")
            code = 1
        else:
            sys.stdout.write(f"{frame}: STOP sent\n")
    return code


if __name__ == "__main__":
    main()
