"""Options and arguments that several commands share."""

from __future__ import annotations

from pathlib import Path

import click
import platformdirs

from daq.errors import MidspanError
from daq.station.places import Places, places_for
from daq.station.stopline import running_frames

DATA = click.option(
    "--data",
    type=click.Path(file_okay=False, path_type=Path),
    default=lambda: Path(platformdirs.user_data_dir("midspan")),
    show_default="the user's data folder",
    help="Folder of the sealed records; one subfolder a series.",
)

FRAME_CARD = click.argument("frame_card", type=click.Path(dir_okay=False, path_type=Path))

METHOD_FOLDERS = click.option(
    "--methods",
    type=click.Path(file_okay=False, path_type=Path),
    multiple=True,
    help="Folder of your own method cards; may be given several times. Always looked into: the user's configuration "
    "folder, midspan/methods.",
)


def method_folders(given: tuple[Path, ...]) -> tuple[Path, ...]:
    """Folders of own method cards, the given ones first; the user's own folder where it is there."""
    own = Path(platformdirs.user_config_dir("midspan")) / "methods"
    return (*given, own) if own.is_dir() else given


def running_places(frame: str | None) -> Places:
    """The frame that is meant: the named one, or the only one that is served."""
    frames = running_frames()
    if frame is None and len(frames) > 1:
        raise MidspanError(f"several frames are served: {', '.join(frames)}; name one with --frame")
    if frame is None and not frames:
        raise MidspanError("no frame is served by this user; start one with `midspan serve FRAME_CARD`")
    chosen = frame or frames[0]
    if chosen not in frames:
        raise MidspanError(f"frame {chosen!r} is not served; served are: {', '.join(frames) or 'none'}")
    return places_for(chosen, Path("."))
