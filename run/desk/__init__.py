"""The desk: checking types by hand, in a browser, on this machine only."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence

__all__ = ["serve"]


def serve(paths: Sequence[str], port: int | None = None, open_browser: bool = True) -> int:
    """Serve the desk for spectra, or for a run folder, until interrupted; print the address.

    Parameters
    ----------
    paths : spectrum files, or one run folder
    port : None for any free one
    open_browser : open the address in the default browser

    Returns
    -------
    int : exit code, 0

    Raises
    ------
    RequestError : there is nothing to show, or the port is taken
    """
    from starfathom.desk.gather import gather

    night = gather(paths)
    from starfathom.desk.server import Desk
    from starfathom.desk.windows import known_marks

    count = len(night.stars)
    before = len(night.decisions())
    try:
        night.type_some()
        desk = Desk(night, known_marks(), port or 0)
        print(f"{count} star{'s' if count != 1 else ''} on the desk: {desk.address}", flush=True)
        print(f"Decisions are kept in {night.log.path}. Stop with Ctrl-C.", flush=True)
        if open_browser:
            _open_browser(desk.address)
        desk.run()
    except KeyboardInterrupt:
        pass                                       # the way to stop; every decision is on the disk already
    kept = len(night.decisions())
    print(f"\n{kept} of {count} decided ({kept - before} now), kept in {night.log.path}.")
    if night.afterwards and kept > before:
        print(night.afterwards)
    return 0


def _open_browser(address: str) -> None:
    """Open the address, quietly: a browser's own chatter does not belong on this terminal."""
    import webbrowser

    if sys.platform.startswith("linux") and not (os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")):
        return
    webbrowser.open(address)


