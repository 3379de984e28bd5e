"""The Results dock: tables that follow the selection, export, report, and analyses opened again."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from qtpy.QtCore import Qt, QUrl
from qtpy.QtGui import QDesktopServices, QKeySequence
from qtpy.QtWidgets import (
    QApplication,
    QCheckBox,
    QFileDialog,
    QHBoxLayout,
    QLineEdit,
    QMessageBox,
    QPushButton,
    QShortcut,
    QTableView,
    QTabWidget,
    QToolButton,
)

from ..analysis.columns import TABLES
from ..analysis.plan_columns import PLAN
from ..analysis.run import put_together
from ..analysis.summary import cautions_of
from ..errors import InputError, OutputError
from ..reports import check_can_write
from ..reports.apart import write_result_apart
from ..reports.nwb_details import NwbDetails, check_can_write_nwb
from .calm import WhenCalm
from .layers import show_frame
from .panel import Panel, sentence_label
from .plan_part import PlanPart
from .reopen import ask_and_reopen
from .table_model import TableModel, cell_text
from .table_view import select_rows, table_view
from .worker import ProgressRow

if TYPE_CHECKING:
    import napari
    import pandas as pd

    from ..analysis.column_types import TableDefinition
    from ..analysis.measured import Measured
    from ..analysis.progress import Progress
    from ..recording import Movie

_TITLES = {"boutons": "Boutons", "pulses": "Pulses", "responses": "Responses", "spontaneous": "Spontaneous"}
_FIRST = {
    # what a reader looks for first; copies and files keep the data dictionary's order
    "boutons": (
        *("bouton", "p_release", "p_release_lo", "p_release_hi", "n_sites", "n_set", "p_site", "q", "snr"),
        *("ppr", "ppr_lo", "ppr_hi", "paired_pulse", "found_by", "flags"),
    ),
    "plan": ("bouton", "goal", "trials_needed", "wanted", "reached", "trials_done", "reached_now", "reason"),
}
_KEYS = ("bouton", "trial", "pulse")
_EXPORT = "Tables, traces, footprints, figures and report are written into the folder."


@dataclass(frozen=True, slots=True, kw_only=True)
class TableTab:
    """One table and its model."""

    view: QTableView
    rows: TableModel


class ResultsDock(Panel):
    """Last step: what was found."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self._following = False
        self._stale_tabs: set[str] = set()
        self._calm = WhenCalm(self.model, self._show_when_seen, self)
        self._build()
        self.link(self.model.measured_changed, self._calm.follow)
        self.link(self.model.recording_changed, self._calm.follow)
        self.link(self.model.settings_changed, self._show_state)
        self.link(self.model.edits_changed, self._show_state)
        self.link(self.model.selection_changed, self._follow_selected)
        self._show_measured()

    def _build(self) -> None:
        self.tabs = QTabWidget()
        self.tables = {name: self._make_table(TABLES[name]) for name in _TITLES}
        for name, tab in self.tables.items():
            self.tabs.addTab(tab.view, _TITLES[name])
        self.tables["plan"] = self._make_table(PLAN)
        self.plan = PlanPart(self, self.tables["plan"].view, say=self._say, on_planned=self._show_planned)
        self.tabs.setTabToolTip(self.tabs.addTab(self.plan, "Plan"), "Trials that each bouton needs for a goal")
        self.tabs.setMinimumHeight(180)
        self.tabs.currentChanged.connect(self._show_tab)
        self.column.addWidget(self.tabs, 1)
        self.only_selected = QCheckBox("Only the selected bouton")
        self.only_selected.setToolTip(
            "Show the pulses, responses, spontaneous releases and plan of the selected bouton only."
        )
        self.only_selected.clicked.connect(self._show_measured)
        self.copy_button = QPushButton("Copy")
        self.copy_button.setToolTip("Copy the selected rows, or all, with their header (Ctrl+C).")
        self.copy_button.clicked.connect(self.copy)
        row = QHBoxLayout()
        row.addWidget(self.only_selected, 1)
        row.addWidget(self.copy_button)
        self.column.addLayout(row)
        shortcut = QShortcut(QKeySequence(QKeySequence.StandardKey.Copy), self.tabs)
        shortcut.setContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
        shortcut.activated.connect(self.copy)

        self.folder = QLineEdit()
        self.folder.setPlaceholderText("folder for the results")
        self.folder.setAccessibleName("Folder for the results")
        self.folder.setToolTip(_EXPORT)
        self.choose_button = QToolButton()
        self.choose_button.setText("...")
        self.choose_button.setToolTip("Choose another folder.")
        self.choose_button.clicked.connect(self._ask_folder)
        row = QHBoxLayout()
        row.addWidget(self.folder, 1)
        row.addWidget(self.choose_button)
        self.column.addLayout(row)
        self.export_button = QPushButton("Export")
        self.export_button.clicked.connect(self.export)
        self.report_button = QPushButton("Open report")
        self.report_button.setToolTip("Show the report that was exported.")
        self.report_button.clicked.connect(self.open_report)
        self.reopen_button = QPushButton("Reopen...")
        self.reopen_button.setToolTip("Open the analysis.json of an earlier export, with its movie and choices.")
        self.reopen_button.clicked.connect(self._ask_reopen)
        self.nwb = QCheckBox("NWB file")
        self.nwb.setToolTip("Export recording.nwb, too: the results as Neurodata Without Borders.")
        row = QHBoxLayout()
        row.addWidget(self.export_button, 1)
        row.addWidget(self.nwb)
        row.addWidget(self.report_button, 1)
        row.addWidget(self.reopen_button, 1)
        self.column.addLayout(row)
        self.progress = ProgressRow(self.runner)
        self.column.addWidget(self.progress)
        self.state = sentence_label()
        self.column.addWidget(self.state)
        self.cautions = sentence_label()
        self.column.addWidget(self.cautions)
        self.folder.textChanged.connect(self._show_state)
        self.runner.changed.connect(self._show_state)
        self.runner.failed.connect(self._say)

    def _make_table(self, definition: TableDefinition) -> TableTab:
        rows = TableModel(definition)
        view = table_view(rows, definition, first=_FIRST.get(definition.name, ()))
        view.selectionModel().selectionChanged.connect(self._select_from_table)
        rows.modelReset.connect(self._follow_selection)
        return TableTab(view=view, rows=rows)

    # tables

    def _show_when_seen(self) -> None:
        self.when_seen(self._show_measured)

    def _follow_selected(self) -> None:
        self.when_seen(self._follow_selection)

    def _show_measured(self, *_: object) -> None:
        measured = self.model.measured
        self._stale_tabs = set(self.tables)
        self._show_tab()
        movie = self.model.movie
        if movie is not None and not self.folder.isModified():
            self.folder.setText(str(default_folder(movie) or ""))
        self.cautions.setText("" if measured is None else "\n".join(f"• {one}" for one in cautions_of(measured)))
        self._show_state()

    def _show_tab(self, *_: object) -> None:
        """Fill the table that is in sight; the others wait until they are."""
        name = list(self.tables)[self.tabs.currentIndex()]
        self.only_selected.setEnabled(name != "boutons")
        if name not in self._stale_tabs:
            return
        self._stale_tabs.discard(name)
        tab = self.tables[name]
        fresh = tab.rows.frame is None
        frame = self._frame(name)
        if frame is None:
            tab.rows.show(None)
            return
        if name != "boutons" and self.only_selected.isChecked():
            frame = frame[frame["bouton"] == self.model.selection.bouton]
        tab.rows.show(frame)
        if fresh:
            tab.view.resizeColumnsToContents()

    def _frame(self, name: str) -> pd.DataFrame | None:
        if name == "plan":
            return self.plan.frame
        return None if self.model.measured is None else self.model.table(name)

    def _show_planned(self) -> None:
        self._stale_tabs.add("plan")
        self._show_tab()

    def _follow_selection(self, *_: object) -> None:
        """Select the rows of what is selected elsewhere."""
        if self._following or not hasattr(self, "tables"):
            return
        if self.only_selected.isChecked() and self.sender() not in [tab.rows for tab in self.tables.values()]:
            self._stale_tabs |= set(self.tables) - {"boutons"}
            self._show_tab()
        chosen = self.model.selection
        self._following = True
        try:
            for name, tab in self.tables.items():
                keys = {key: getattr(chosen, key) for key in _KEYS}
                rows = [] if chosen.bouton is None else tab.rows.rows_where(**keys)
                if name not in ("boutons", "plan") and chosen.trial is None and chosen.pulse is None:
                    rows = rows[:1]  # the first of many: selecting them all would only colour the table
                select_rows(tab.view, rows)
        finally:
            self._following = False

    def _select_from_table(self, *_: object) -> None:
        """Select elsewhere what was selected in the table in sight."""
        if self._following:
            return
        name = list(self.tables)[self.tabs.currentIndex()]
        tab = self.tables[name]
        index = tab.view.currentIndex()
        if not index.isValid() or not tab.view.selectionModel().hasSelection():
            return
        row = tab.rows.row(index.row())
        self._following = True
        try:
            self.model.select(**{key: int(row[key]) for key in _KEYS if cell_text(row.get(key))})
        finally:
            self._following = False
        if name == "spontaneous" and self.model.measured is not None:
            timing = self.model.measured.timing
            show_frame(self.viewer, int(timing.frame_start_s.searchsorted(row["time_s"], side="right")) - 1)

    def copy(self) -> None:
        """Copy the selected rows of the table in sight, or all of it."""
        tab = list(self.tables.values())[self.tabs.currentIndex()]
        rows = sorted({index.row() for index in tab.view.selectionModel().selectedRows()})
        text = tab.rows.as_text(rows)
        if text:
            QApplication.clipboard().setText(text)

    # files

    def export(self) -> None:
        """Write everything into the folder, as the command line does; ask before results are replaced."""
        measured, pipeline = self.model.measured, self.model.pipeline
        if not self.folder.text().strip():  # a movie that is no file has no place beside it
            self._ask_folder()
        text = self.folder.text().strip()
        if not text or measured is None or pipeline is None:
            return
        folder = Path(text).expanduser()
        nwb = NwbDetails() if self.nwb.isChecked() else None
        try:
            if nwb is not None:
                check_can_write_nwb()
            overwrite = self._may_replace(folder)
        except InputError as error:
            self._say(str(error))
            return
        if overwrite is None:
            return

        def work(progress: Progress) -> Path:
            progress(0, 0)
            result = put_together(measured, pipeline=pipeline)
            return write_result_apart(result, folder, overwrite=overwrite, nwb=nwb, progress=progress)

        self.runner.run(work, self._exported, words="Exporting", kind="export")

    def _may_replace(self, folder: Path) -> bool | None:
        """Tell whether results are to be replaced; None if they are there and are not to be."""
        check_can_write(folder, overwrite=True)
        try:
            check_can_write(folder, overwrite=False)
        except OutputError:
            answer = QMessageBox.question(self, "Replace results?", f"{folder} already holds results. Replace them?")
            return True if answer == QMessageBox.StandardButton.Yes else None
        return False

    def _exported(self, folder: Path) -> None:
        self._show_state()
        self._say(f"Exported to {folder}.")

    def open_report(self) -> None:
        """Show the exported report."""
        QDesktopServices.openUrl(QUrl.fromLocalFile(str(self._report())))

    def _report(self) -> Path:
        return Path(self.folder.text().strip()).expanduser() / "report.pdf"

    def _ask_folder(self) -> None:
        path = QFileDialog.getExistingDirectory(self, "Folder for the results", self.folder.text())
        if path:
            self.folder.setText(path)
            self.folder.setModified(True)

    def _ask_reopen(self) -> None:
        ask_and_reopen(self.viewer, self)

    def _show_state(self, *_: object) -> None:
        measured: Measured | None = self.model.measured
        ready = measured is not None and not self.model.stale
        chosen = bool(self.folder.text().strip())
        self.export_button.setText("Export" if chosen else "Export...")
        self.export_button.setToolTip(_EXPORT if chosen else f"Choose a folder. {_EXPORT}")
        self.export_button.setEnabled(ready and not self.runner.busy)
        self.report_button.setEnabled(chosen and self._report().is_file())
        self.copy_button.setEnabled(measured is not None)
        self.plan.show_state()
        if measured is None:
            self._say("Nothing was measured yet: choose a movie in the Recording dock and analyse it.")
        elif not ready:
            self._say("Something has changed since the analysis: analyse again before exporting.")
        else:
            self._say("")

    def _say(self, sentence: str) -> None:
        self.state.setText(sentence)
        self.state.setVisible(bool(sentence))


def default_folder(movie: Movie) -> Path | None:
    """Return `<movie>.release` beside the movie; None for one that is no file."""
    if not movie.files:
        return None
    first = movie.files[0]
    beside = first.parent if len(movie.files) > 1 and movie.name == first.parent.resolve().name else first
    return beside.with_name(f"{movie.name}.release")
