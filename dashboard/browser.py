"""Opening the page in the person's browser, where there is one to open."""

from __future__ import annotations

import os
import sys
import threading
import webbrowser


def open_page(address: str) -> bool:
    """Open an address in the browser without waiting for it; False if there is no display.

    Without a display Python would look for a browser that runs in the terminal, over what we
    show there.
    """
    displays = ("DISPLAY", "WAYLAND_DISPLAY", "BROWSER")
    if sys.platform == "linux" and not any(os.environ.get(name) for name in displays):
        return False
    threading.Thread(target=webbrowser.open, args=(address,), daemon=True).start()
    return True
