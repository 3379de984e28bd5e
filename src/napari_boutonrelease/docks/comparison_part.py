"""The part of the Axon dock that compares recordings: a list of them, what changed, and its export."""

from __future__ import annotations

from html import escape
from pathlib import Path
from typing import TYPE_CHECKING

from napari.utils import notifications
from qtpy.QtCore import Qt
from qtpy.QtGui import QResizeEvent
from qtpy.QtWidgets import (
    QBoxLayout,
    QDoubleSpinBox,
    QFileDialog,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QMessageBox,
    QPushButton,
    QScrollArea,
    QTableView,
    QTabWidget,
    QVBoxLayout,
    QWidget,
)

from ..comparison import CompareSettings
from ..comparison.columns import CHANGES, JOINT
from ..errors import InputError, OutputError
from ..reports import check_can_write
from ..reports.apart import write_comparison_apart
from ..reports.comparison import COMPARISON_MARK
from ..reports.comparison_report import comparison_sentences
from .compared import Entry, compare, compared_of
from .comparison_list import ComparisonList, tool_button
from .comparison_plots import ReleasePlot, SitesComparedPlot
from .results_dock import default_folder
from .table_model import TableModel
from .table_view import select_rows, table_view

if TYPE_CHECKING:
    from ..analysis.column_types import TableDefinition
    from ..analysis.progress import Progress
    from ..comparison import Comparison
    from ..recording import Movie
    from .panel import Panel

_WIDE_PX, _LIST_PX = 680, 350
_EMPTY = "Add the results of two or more recordings of the same boutons, in the order in which they were made."
_ONE = "Add the results of another recording of the same boutons."
_READY = "Press Compare."
_OUTDATED = "The recordings have changed since they were compared."
_FIRST_COLUMNS = (
    *("bouton", "p_release_change", "p_release_change_lo", "p_release_change_hi", "p_changed_p_adjusted"),
    *("q_ratio", "q_ratio_lo", "q_ratio_hi", "q_changed_p_adjusted", "recording_a", "recording_b"),
)


class ComparisonPart(QWidget):
    """Recordings to be compared at the top or left; findings below or beside them.

    Parameters
    ----------
    panel : Panel
        The dock it belongs to.
    """

    def __init__(self, panel: Panel) -> None:
        super().__init__()
        self.panel, self.model, self.runner = panel, panel.model, panel.runner
        self.compared = compared_of(self.model)
        self._filling = False
        self.parts = QBoxLayout(QBoxLayout.Direction.TopToBottom, self)
        self.parts.setContentsMargins(0, 4, 0, 0)
        self.parts.addWidget(self._make_choices())
        self.parts.addWidget(self._make_findings(), 1)
        panel.link(self.compared.entries_changed, self._show_entries)
        panel.link(self.compared.found, self._show_found)
        panel.link(self.model.measured_changed, self._show_state)
        panel.link(self.model.recording_changed, self._show_state)
        panel.link(self.model.settings_changed, self._show_state)
        panel.link(self.model.edits_changed, self._show_state)
        panel.link(self.model.selection_changed, self._follow_selection)
        panel.link(self.runner.changed, self._show_state)
        self._show_entries()
        self._show_found()

    # widgets

    def _make_choices(self) -> QWidget:
        self.list = ComparisonList(self.panel)
        self.reach = QDoubleSpinBox()
        self.reach.setRange(0.05, 20.0)
        self.reach.setSingleStep(0.1)
        self.reach.setDecimals(2)
        self.reach.setSuffix(" µm")
        self.reach.setValue(CompareSettings().match_um)
        self.reach.setToolTip(
            "How far apart both positions of a bouton may lie after the mean images were laid on one another"
        )
        self.compare_button = QPushButton("Compare")
        self.compare_button.setToolTip("Match the boutons, and find what changed from recording to recording.")
        self.compare_button.clicked.connect(self.compare)
        label = QLabel("Same bouton within")
        label.setBuddy(self.reach)
        label.setToolTip(self.reach.toolTip())
        row = QHBoxLayout()
        row.addWidget(label)
        row.addWidget(self.reach)
        row.addWidget(self.compare_button, 1)
        group = QWidget()
        column = QVBoxLayout(group)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.list, 1)
        column.addLayout(row)
        self.state = QLabel()
        self.state.setWordWrap(True)
        column.addWidget(self.state)
        return group

    def _make_findings(self) -> QWidget:
        self.words = QLabel()
        self.words.setWordWrap(True)
        self.words.setAlignment(Qt.AlignmentFlag.AlignTop)
        self.words.setTextFormat(Qt.TextFormat.RichText)
        self.words.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.words.setContentsMargins(4, 4, 4, 4)
        text = QScrollArea()
        text.setWidget(self.words)
        text.setWidgetResizable(True)
        text.setFrameShape(QScrollArea.Shape.NoFrame)
        self.release = ReleasePlot(self.panel, on_click=self._select)
        self.sites = SitesComparedPlot(self.panel, on_click=self._select)
        self.changes, self.joint = TableModel(CHANGES), TableModel(JOINT)
        self.tables = {
            "changes": (self._table(self.changes, CHANGES, _FIRST_COLUMNS), self.changes),
            "joint": (self._table(self.joint, JOINT), self.joint),
        }
        self.tabs = QTabWidget()
        self.tabs.setMinimumHeight(160)
        for title, page, tip in (
            ("Findings", text, "What changed, in sentences"),
            ("p_release", self.release, "p_release of each bouton in each recording"),
            ("n_sites", self.sites, "Sites from all recordings together, beside the first alone"),
            ("Changes", self.tables["changes"][0], CHANGES.meaning),
            ("Together", self.tables["joint"][0], JOINT.meaning),
        ):
            self.tabs.setTabToolTip(self.tabs.addTab(page, title), tip)
        self.folder = QLineEdit()
        self.folder.setPlaceholderText("folder for the comparison")
        self.folder.setAccessibleName("Folder for the comparison")
        self.folder.textChanged.connect(self._show_state)
        self.choose_button = tool_button("...", "Choose another folder.", self._ask_out)
        self.export_button = QPushButton("Export comparison")
        self.export_button.setToolTip(
            "Write tables, figures and report into the folder, as boutonrelease compare does."
        )
        self.export_button.clicked.connect(self.export)
        row = QHBoxLayout()
        row.addWidget(self.folder, 1)
        row.addWidget(self.choose_button)
        row.addWidget(self.export_button)
        self.findings = QWidget()
        column = QVBoxLayout(self.findings)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.tabs, 1)
        column.addLayout(row)
        return self.findings

    def _table(self, rows: TableModel, definition: TableDefinition, first: tuple[str, ...] = ()) -> QTableView:
        view = table_view(rows, definition, first=first)
        view.selectionModel().selectionChanged.connect(self._select_from_table)
        rows.modelReset.connect(self._show_selected)
        return view

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Put the list beside the findings where there is room, else above."""
        super().resizeEvent(event)
        wide = event.size().width() > _WIDE_PX
        self.parts.setDirection(QBoxLayout.Direction.LeftToRight if wide else QBoxLayout.Direction.TopToBottom)
        self.parts.itemAt(0).widget().setMaximumWidth(_LIST_PX if wide else 16_777_215)

    # what is shown

    def _show_entries(self) -> None:
        if not self.folder.isModified():
            self.folder.setText(str(default_comparison_folder(self.compared.entries, self.model.movie) or ""))
        self._show_state()

    def _show_found(self) -> None:
        comparison = self.compared.comparison
        self.findings.setVisible(comparison is not None)
        self.words.setText("" if comparison is None else _in_words(comparison))
        for name, (view, rows) in self.tables.items():
            rows.show(None if comparison is None else getattr(comparison, name))
            view.resizeColumnsToContents()
        self._follow_selection()
        self._show_state()

    def _show_state(self, *_: object) -> None:
        n = len(self.compared.entries)
        self.compare_button.setEnabled(n > 1 and not self.runner.busy)
        found = self.compared.comparison is not None
        outdated = self.compared.outdated(self.model.measured)
        self.export_button.setText("Export comparison" if self.folder.text().strip() else "Export comparison...")
        self.export_button.setEnabled(found and not self.runner.busy)
        words = _EMPTY if not n else _ONE if n == 1 else "" if found else _READY
        self.state.setText(_OUTDATED if outdated else words)
        self.state.setVisible(bool(self.state.text()))

    def _follow_selection(self) -> None:
        """Show the bouton that is selected in the window, where it was compared."""
        bouton = self.compared.compared(self.model.selection.bouton)
        if bouton is not None:
            self.compared.bouton = bouton
        self._show_selected()

    def _show_selected(self, *_: object) -> None:
        bouton = self.compared.bouton
        for plot in (self.release, self.sites):
            plot.show_comparison(self.compared.comparison, bouton)
        self._filling = True
        for view, rows in self.tables.values():
            select_rows(view, [] if bouton is None else rows.rows_where(bouton=bouton))
        self._filling = False

    # what a person does

    def _select(self, bouton: int) -> None:
        """Select a bouton of the first recording, and its like in the window."""
        self.compared.bouton = bouton
        here = self.compared.here(bouton)
        if here is not None:
            self.model.select(bouton=here)
        self._show_selected()

    def _select_from_table(self, *_: object) -> None:
        if self._filling:
            return
        for view, rows in self.tables.values():
            index = view.currentIndex()
            if view.isVisible() and index.isValid() and view.selectionModel().hasSelection():
                self._select(int(rows.row(index.row())["bouton"]))
                return

    def compare(self) -> None:
        """Compare the recordings of the list in another thread."""
        entries, measured, pipeline = self.compared.entries, self.model.measured, self.model.pipeline
        with_present = self.compared.has_present
        if with_present and self.model.stale:
            notifications.show_error(
                "Settings or boutons have changed since the analysis in this window: analyse again before comparing."
            )
            return
        present = None if measured is None or pipeline is None else (measured, pipeline)
        settings = CompareSettings(match_um=self.reach.value())

        def work(progress: Progress) -> tuple[Comparison, tuple[Entry, ...], object]:
            return compare(entries, present=present, settings=settings, progress=progress), entries, measured

        self.runner.run(work, self._take, words="Comparing", kind="compare")

    def _take(self, outcome: tuple[Comparison, tuple[Entry, ...], object]) -> None:
        comparison, entries, measured = outcome
        self.compared.take(comparison, entries, measured)  # type: ignore[arg-type]

    # export

    def export(self) -> None:
        """Write the comparison into the folder, as the command line does; ask before one is replaced."""
        comparison = self.compared.comparison
        if not self.folder.text().strip():
            self._ask_out()
        text = self.folder.text().strip()
        if not text or comparison is None:
            return
        folder = Path(text).expanduser()
        try:
            overwrite = self._may_replace(folder)
        except InputError as error:
            notifications.show_error(str(error))
            return
        if overwrite is None:
            return

        def work(progress: Progress) -> Path:
            progress(0, 0)
            return write_comparison_apart(comparison, folder, overwrite=overwrite, progress=progress)

        self.runner.run(work, self._exported, words="Exporting", kind="export comparison")

    def _may_replace(self, folder: Path) -> bool | None:
        """Tell whether a comparison is to be replaced; None if one is there and is not to be."""
        check_can_write(folder, overwrite=True, mark=COMPARISON_MARK)
        try:
            check_can_write(folder, overwrite=False, mark=COMPARISON_MARK)
        except OutputError:
            question = f"{folder} already holds a comparison. Replace it?"
            answer = QMessageBox.question(self, "Replace comparison?", question)
            return True if answer == QMessageBox.StandardButton.Yes else None
        return False

    def _exported(self, folder: Path) -> None:
        self._show_state()
        self.state.setText(f"Exported to {folder}.")
        self.state.setVisible(True)

    def _ask_out(self) -> None:
        path = QFileDialog.getExistingDirectory(
            self, "Folder for the comparison", self.folder.text() or str(self.list.near())
        )
        if path:
            self.folder.setText(path)
            self.folder.setModified(True)


def default_comparison_folder(entries: tuple[Entry, ...], movie: Movie | None) -> Path | None:
    """Return `<first>.comparison` beside the results of the first recording; None where these have no place yet."""
    if not entries:
        return None
    results = entries[0].folder or (None if movie is None else default_folder(movie))
    return None if results is None else results.with_name(f"{results.name.removesuffix('.release')}.comparison")


def _in_words(comparison: Comparison) -> str:
    def paragraph(text: str, *, bullet: str = "") -> str:
        return f'<p style="margin:0 0 5px 0">{bullet}{escape(text)}</p>'

    sentences = "".join(paragraph(one) for one in comparison_sentences(comparison))
    cautions = "".join(paragraph(one, bullet="• ") for one in comparison.cautions)
    return f"{sentences}<p style='margin:8px 0 4px 0'><b>Before you quote these numbers</b></p>{cautions}"
