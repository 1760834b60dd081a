"""The window as a program: one Qt application, one window, the user's folders."""

from __future__ import annotations

import signal
import sys
from pathlib import Path

import platformdirs
from PySide6.QtCore import QTimer
from PySide6.QtWidgets import QApplication

from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.session.settings import load_settings
from pulsemend.window.garbage import Garbage
from pulsemend.window.icons import program_icon
from pulsemend.window.main_window import Folders, MainWindow

NAME = "pulsemend"
_WAKE_MS = 300


def user_folders() -> Folders:
    """Name the user's folders, as the platform has them."""
    return Folders(
        data=platformdirs.user_data_path(NAME, appauthor=False),
        state=platformdirs.user_state_path(NAME, appauthor=False),
        cache=platformdirs.user_cache_path(NAME, appauthor=False),
        settings=platformdirs.user_config_path(NAME, appauthor=False) / "settings.json",
    )


def run(recording: Path | None, plan: Path | None) -> int:
    """Show the window until it is closed.

    Parameters
    ----------
    recording, plan : Path or None
        What to open in it.

    Returns
    -------
    int
        The program's exit code.
    """
    application = QApplication(sys.argv[:1])
    application.setApplicationName("Pulsemend")
    application.setWindowIcon(program_icon())
    Garbage(application)
    window = open_window(user_folders(), recording, plan)
    window.show()
    window.show_first_notice()
    # Signals from a terminal reach Python only while it runs now and then.
    waking = QTimer()
    waking.timeout.connect(lambda: None)
    waking.start(_WAKE_MS)
    signal.signal(signal.SIGINT, lambda *_: window.close())
    signal.signal(signal.SIGTERM, lambda *_: window.close())
    return application.exec()


def open_window(folders: Folders, recording: Path | None, plan: Path | None) -> MainWindow:
    """Make a window and begin to open what it is to show.

    Parameters
    ----------
    folders : Folders
        The user's.
    recording, plan : Path or None
        What to open in it.
    """
    loaded = load_settings(folders.settings)
    session = Session(folders.data / "journals")
    window = MainWindow(session, loaded.settings, folders)
    if loaded.words:
        session.say(Message(Level.ATTENTION, loaded.words))
    if recording is not None or plan is not None:
        window.opener.open(recording, plan)
    return window
