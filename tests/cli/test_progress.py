"""Progress is shown on a terminal, and only there."""

from __future__ import annotations

import io
import sys
import time

from napari_boutonrelease.cli.progress import progress_bar


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_a_terminal_sees_the_share_done(monkeypatch):
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    with progress_bar("measuring") as progress:
        progress(0, 40)
        time.sleep(0.15)  # a bar is drawn anew ten times a second at most
        progress(20, 40)
    assert "measuring" in terminal.getvalue()
    assert " 50%" in terminal.getvalue()


def test_a_file_sees_nothing(monkeypatch):
    file = io.StringIO()
    monkeypatch.setattr(sys, "stderr", file)
    with progress_bar("measuring") as progress:
        assert progress is None
    assert file.getvalue() == ""
