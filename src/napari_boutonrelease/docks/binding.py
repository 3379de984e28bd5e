"""A warning of releases of Qt for Python that end the interpreter after a while."""

from __future__ import annotations

import platform
import sys
from functools import cache

import qtpy
from napari.utils import notifications
from qtpy.QtCore import QObject

_CALLS = 1000


def loses_references() -> bool:
    """Whether the binding gives back references to None that it never took, as PySide6 6.12.0 does.

    Python before 3.12 ends when none are left. Later ones do not count them.
    """
    orphan = QObject()
    before = sys.getrefcount(None)
    for _ in range(_CALLS):
        orphan.parent()
    return sys.getrefcount(None) < before - _CALLS // 2


@cache
def warn_of_binding() -> None:
    """Say once what such a binding will do, and what to install instead."""
    if loses_references():
        release = qtpy.PYSIDE_VERSION or qtpy.PYQT_VERSION
        notifications.show_warning(
            f"{qtpy.API_NAME} {release} ends Python {platform.python_version()} after some minutes of use, and what "
            "was not exported is lost. Install another release, for example pip install 'PySide6<6.12', or use Python "
            "3.12 or newer."
        )
