"""The profile panel: one transect, its plate, and controls that the curve follows."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from qgis.core import (
    QgsApplication,
    QgsCoordinateReferenceSystem,
    QgsProject,
    QgsVectorLayer,
)
from qgis.gui import QgsMapCanvas
from qgis.PyQt.QtCore import Qt, QTimer, pyqtSignal
from qgis.PyQt.QtWidgets import (
    QCheckBox,
    QDockWidget,
    QFrame,
    QGridLayout,
    QHBoxLayout,
    QLabel,
    QProgressBar,
    QPushButton,
    QScrollArea,
    QSizePolicy,
    QStackedLayout,
    QStyle,
    QTabWidget,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from ..bridge.outputs import Track
from ..core.errors import DownwarpError
from ..core.result import Estimate
from ..report.figures import INK, LOAD, missing_package, thickness_density
from ..report.words import number
from ..translation import tr, translated
from .input_page import InputPage
from .key_form import KeyForm
from .left_out import add_once, left_out_layer
from .map_place import MapPlace
from .plate_page import PlatePage
from .session import Session, View
from .source import SAMPLING_KEYS, Source, fit_keys, keep, options_of
from .task import Work
from .thickness_control import ThicknessControl

SAMPLE_AFTER_MS = 250
"""Time, ms, without a further change after which the transect is sampled anew."""

_ABSENT_KEYS = ("WORKERS",)
"""Keys that say nothing about one transect."""


class ProfileDock(QDockWidget):
    """The dock; ``fit_dialog_wanted`` asks for the dialog of the algorithm with the panel's keys."""

    fit_dialog_wanted = pyqtSignal(dict)
    draw_wanted = pyqtSignal()

    def __init__(self, canvas: QgsMapCanvas, parent: QWidget | None = None) -> None:
        super().__init__(tr("Downwarp profile"), parent)
        self.setObjectName("DownwarpProfile")
        self._canvas = canvas
        self._project = QgsProject.instance()
        self._session: Session | None = None
        self._track: Track | None = None
        self._crs = QgsCoordinateReferenceSystem()
        self._view: View | None = None
        self._drawn_for: tuple | None = None
        self._work: Work | None = None
        self._works: list[Work] = []
        self._resample = QTimer(self)
        self._resample.setSingleShot(True)
        self._resample.setInterval(SAMPLE_AFTER_MS)
        self._resample.timeout.connect(self._sample)
        self._map = MapPlace(canvas)
        self._build()
        self.visibilityChanged.connect(self._visibility_changed)

    # Building

    def _build(self) -> None:
        body = QWidget()
        row = QHBoxLayout(body)
        row.setContentsMargins(4, 2, 4, 4)
        self.tabs = QTabWidget()
        self.input, self.plate = InputPage(), PlatePage()
        self.plate.show_setting(self.input.setting.currentIndex())
        self.plate.enable(None)
        self.input.draw_wanted.connect(self.draw_wanted)
        for page in (self.input, self.plate):
            page.changed.connect(self._key_changed)
        self.plate.tried.connect(self._trial_changed)
        self.tabs.addTab(self._scrolled(self.input), tr("Input"))
        self.tabs.addTab(self._scrolled(self.plate), tr("Plate"))
        apart = {*InputPage.KEYS, *PlatePage.KEYS, *_ABSENT_KEYS}
        self._more = KeyForm([key for name, key in fit_keys().items() if name not in apart])
        self._more.changed.connect(self._key_changed)
        self.tabs.addTab(self._scrolled(self._more), tr("More"))
        side = QVBoxLayout()
        side.addWidget(self.tabs, 1)
        side.addLayout(self._buttons())
        left = QWidget()
        left.setLayout(side)
        side.setContentsMargins(0, 0, 0, 0)
        left.setFixedWidth(self._side_width())
        row.addWidget(left)
        right = QVBoxLayout()
        right.setSpacing(2)
        self.answer = QLabel(tr("Choose a line and its relief, or draw a transect."))
        self.answer.setObjectName("answer")
        self.answer.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.answer.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        self.complaint = QLabel()
        self.complaint.setObjectName("complaint")
        self.complaint.setWordWrap(True)
        self.complaint.setStyleSheet(f"border: 1px solid {LOAD}; padding: 3px; color: {INK}; background: #fdf3e7;")
        self.complaint.hide()
        above = QHBoxLayout()
        above.setSpacing(0)
        above.addWidget(self.answer, 1)
        right.addLayout(above)
        right.addWidget(self.complaint)
        right.addWidget(self._picture(), 1)
        self._add_view_buttons(above)
        self.reading = QLabel(self._hint())
        self.reading.setObjectName("reading")
        self.reading.setWordWrap(False)
        self.reading.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        self.restore_button = QToolButton()
        self.restore_button.setObjectName("restore")
        self.restore_button.setText(tr("Take all stations back"))
        self.restore_button.setToolTip(tr("Fit all stations again that were left out by hand"))
        self.restore_button.clicked.connect(self._take_all_back)
        below = QHBoxLayout()
        below.addWidget(self.reading, 1)
        below.addWidget(self.restore_button)
        right.addLayout(below)
        self.thickness = ThicknessControl()
        self.thickness.changed.connect(self._trial_changed)
        right.addWidget(self.thickness)
        row.addLayout(right, 1)
        self.setWidget(body)
        self._show_working(False)

    def _side_width(self) -> int:
        """Width, px, at which the longest option fits beside the longest label."""
        measure = self.fontMetrics().horizontalAdvance
        plate = self.plate
        boxes = self.input.setting, plate.plate, plate.break_at, plate.end_forces, plate.regional
        options = max(measure(box.itemText(place)) for box in boxes for place in range(box.count()))
        style = self.style()
        frame = 40 + style.pixelMetric(QStyle.PixelMetric.PM_ScrollBarExtent)
        margins = 2 * style.pixelMetric(QStyle.PixelMetric.PM_LayoutLeftMargin) + 24
        return options + measure(tr("Bent surface")) + frame + margins

    def _scrolled(self, page: QWidget) -> QScrollArea:
        area = QScrollArea()
        area.setWidgetResizable(True)
        area.setFrameShape(QFrame.Shape.NoFrame)
        area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        area.setWidget(page)
        return area

    def _buttons(self) -> QGridLayout:
        grid = QGridLayout()
        grid.setSpacing(3)
        self.fit_button = QPushButton(tr("Fit"))
        self.fit_button.setObjectName("fit")
        self.fit_button.setToolTip(tr("Fit the plate to this transect, as the algorithm does"))
        self.cancel_button = QPushButton(tr("Cancel"))
        self.cancel_button.setObjectName("cancel")
        self.progress = QProgressBar()
        self.progress.setRange(0, 100)
        self.progress.setTextVisible(True)
        self.choices = QCheckBox(tr("Fit under each choice as well"))
        self.choices.setObjectName("choices")
        self.choices.setToolTip(
            tr("Fit again under each reasonable choice (window, regional, densities, plate), some ten fits more")
        )
        self.keep_button = QPushButton(tr("Keep as layers"))
        self.keep_button.setObjectName("keep")
        self.keep_button.setToolTip(tr("Add profile, stations, markers and tables of what is shown to the project"))
        self.dialog_button = QPushButton(tr("All keys…"))
        self.dialog_button.setToolTip(
            tr(
                "Open the algorithm with these values, for all transects of the layer; stations that were left out by "
                "hand are passed on as polygons in a temporary layer"
            )
        )
        grid.addWidget(self.fit_button, 0, 0)
        grid.addWidget(self.cancel_button, 0, 1)
        # One place for both: the progress shows only while something runs.
        self._below = QStackedLayout()
        self._below.addWidget(self.choices)
        self._below.addWidget(self.progress)
        grid.addLayout(self._below, 1, 0, 1, 2)
        grid.addWidget(self.keep_button, 2, 0)
        grid.addWidget(self.dialog_button, 2, 1)
        for column in (0, 1):
            grid.setColumnStretch(column, 1)
        self.fit_button.clicked.connect(self.start_fit)
        self.cancel_button.clicked.connect(self.cancel)
        self.keep_button.clicked.connect(self.keep)
        self.dialog_button.clicked.connect(self._want_dialog)
        return grid

    def _picture(self) -> QWidget:
        self.profile = None
        words = missing_package()
        if words:
            label = QLabel(words)
            label.setObjectName("missing")
            label.setWordWrap(True)
            label.setAlignment(Qt.AlignmentFlag.AlignCenter)
            return label
        from .profile_canvas import ProfileCanvas

        self.profile = ProfileCanvas()
        self.profile.setObjectName("profile")
        self.profile.hovered.connect(self._hovered)
        self.profile.dragged.connect(self._dragged)
        return self.profile

    def _add_view_buttons(self, row: QHBoxLayout) -> None:
        """Buttons for what is in view of the profile, where there is one."""
        if self.profile is None:
            return
        self.hand_button, self.whole_button = QToolButton(), QToolButton()
        self.hand_button.setCheckable(True)
        self.hand_button.toggled.connect(self._take_hand)
        self.whole_button.setEnabled(False)
        self.whole_button.clicked.connect(self.profile.show_whole)
        self.profile.zoomed.connect(self.whole_button.setEnabled)
        wheel = tr("The wheel zooms distances, with Ctrl heights.")
        moving = tr("Move the profile by dragging it; the middle button does so at any time.")
        whole = tr("Whole profile; a double click on it does the same.")
        for button, name, icon, words in (
            (self.hand_button, "hand", "mActionPan.svg", moving),
            (self.whole_button, "whole", "mActionZoomFullExtent.svg", whole),
        ):
            button.setObjectName(name)
            button.setAutoRaise(True)
            button.setIcon(QgsApplication.getThemeIcon(icon))
            button.setToolTip(f"{words} {wheel}")
            row.addWidget(button)

    def _take_hand(self, taken: bool) -> None:
        if self.profile is not None:
            self.profile.hand = taken

    def _hint(self) -> str:
        if self.profile is None:
            return ""
        if self._session is not None and self._session.left_out.any():
            return tr("Drag with Shift to take stations back; the wheel zooms.")
        return tr("Drag to leave stations out of the fit; the wheel zooms, with Ctrl heights.")

    # Input

    def show_feature(self, layer: QgsVectorLayer, feature_id: int) -> None:
        """Choose a transect; where no relief is chosen yet, the topmost raster of one band is."""
        self.input.choose(layer, feature_id, self._project)

    def parameters(self) -> dict[str, Any]:
        """The panel's choices as keys of `fittransects`; those at their defaults may be left out."""
        return {**self._more.parameters(), **self.input.parameters(), **self.plate.parameters()}

    def _want_dialog(self) -> None:
        """Ask for the algorithm's dialog with the panel's keys; stations left out by hand go into FIT_EXCLUDE."""
        parameters = self.parameters()
        session, track = self._session, self._track
        if session is not None and track is not None and session.left_out.any():
            given = self._project.mapLayer(parameters.get("FIT_EXCLUDE", ""))
            try:
                layer = left_out_layer(session, track, self._crs, given)
            except DownwarpError as error:
                self._complain(translated(error.message))
                return
            parameters["FIT_EXCLUDE"] = add_once(layer, self._project).id()
        self.fit_dialog_wanted.emit(parameters)

    def set_key(self, name: str, value: Any) -> None:
        """Set one of the keys under More."""
        self._more.set_value(name, value)

    def _key_changed(self, name: str) -> None:
        """Sample anew, or only bend anew, as the key that changed asks for."""
        if name == "SETTING":
            self.plate.show_setting(self.input.setting.currentIndex())
        self.plate.enable(self._session)
        if name in SAMPLING_KEYS or self._session is None:
            self._session_gone()
            self._resample.start()
            return
        try:
            self._session.options = options_of(self.parameters())
        except DownwarpError as error:
            self._complain(translated(error.message))
            return
        self._options_changed()

    def _session_gone(self) -> None:
        self.cancel()
        self._session, self._view, self._track, self._drawn_for = None, None, None, None
        self._show_line()
        if self.profile is not None:
            self.profile.clear()
        self.thickness.strip.set_posterior(None, (None, None), False)
        self._show_working(False)

    def _sample(self) -> None:
        """Read the transect in the background."""
        feature = self.input.chosen()
        self._complain("")
        if feature is None or not self.isVisible():
            self.answer.setText(tr("Choose a line and its relief, or draw a transect."))
            return
        try:
            source = Source(self.parameters(), feature, self._project)
        except DownwarpError as error:
            self._complain(translated(error.message))
            return
        self.answer.setText(tr("Reading the transect…"))

        def sampled(answer: tuple[Track, Session]) -> None:
            self._track, self._session = answer
            self._crs = source.crs
            self._start_session()

        self._start(tr("Downwarp: reading a transect"), source.sample, sampled)

    # Work in the background

    def _start(self, words: str, job: Callable, done: Callable[[Any], None]) -> None:
        work: Work

        def ended() -> None:
            self._works.remove(work)
            if self._work is work:
                self._work = None
                self._show_working(False)

        def mine(answer: Any) -> None:
            if self._work is work:
                done(answer)

        def failed(sentence: str) -> None:
            if self._work is work:
                self._complain(sentence)

        work = Work(words, job, mine, failed, ended)
        work.progressChanged.connect(lambda fraction: self.progress.setValue(round(fraction)))
        # Python must hold on to every task until QGIS has ended it.
        self._works.append(work)
        self._work = work
        self._show_working(True)
        QgsApplication.taskManager().addTask(work)

    def cancel(self) -> None:
        """Stop what runs in the background; what it was for is forgotten."""
        if self._work is not None:
            self._work.cancel()
            self._work = None
        self._show_working(False)

    def _show_working(self, working: bool) -> None:
        self.progress.setValue(0)
        self._below.setCurrentWidget(self.progress if working else self.choices)
        self.cancel_button.setEnabled(working)
        ready = self._session is not None and not working
        self.fit_button.setEnabled(ready)
        self.keep_button.setEnabled(self._view is not None)
        self.restore_button.setVisible(self._session is not None and bool(self._session.left_out.any()))

    def start_fit(self) -> None:
        """Fit this transect in the background."""
        if self._session is None or self._work is not None:
            return
        session = self._session
        self._complain("")

        def fitted(adopt: Callable[[], None]) -> None:
            if session is not self._session:
                return
            adopt()
            self._fit_adopted()

        self._start(tr("Downwarp: fitting a transect"), session.job(self.choices.isChecked()), fitted)

    def _fit_adopted(self) -> None:
        session = self._session
        if session is None:
            return
        trial = session.fitted_trial()
        if trial is None:
            # Something was changed while the fit ran: its posterior is shown, hatched.
            self._refresh()
            return
        self.plate.show_trial(trial)
        self.thickness.set_thickness(trial.thickness)
        self._refresh()

    # What is shown

    def _start_session(self) -> None:
        session = self._session
        if session is None:
            return
        options = session.options
        self.thickness.set_range(options.te_from, options.te_to)
        self.plate.show_line(float(session.profile.distance[-1]))
        self._show_line()
        self.reading.setText(self._hint())
        try:
            self.thickness.set_thickness(session.first_trial().thickness)
        except DownwarpError as error:
            self._complain(translated(error.message))
        self._refresh()

    def _options_changed(self) -> None:
        session = self._session
        if session is None:
            return
        if (session.options.te_from, session.options.te_to) != self.thickness.range:
            self.thickness.set_range(session.options.te_from, session.options.te_to)
        self._refresh()

    def _trial_changed(self, *arguments: Any) -> None:
        self._refresh()

    def _refresh(self) -> None:
        """Bend the plate of the controls and show it."""
        session = self._session
        self.plate.enable(session)
        if session is None:
            return
        self._show_posterior()
        try:
            self._view = session.view(self.plate.trial(self.thickness.thickness, session))
        except DownwarpError as error:
            self._complain(translated(error.message))
            return
        self._complain("")
        self._draw(session, self._view)
        self.plate.show_view(self._view)
        self._show_answer(self._view)
        self._show_working(self._work is not None)

    def _draw(self, session: Session, view: View) -> None:
        if self.profile is None:
            return
        fitted = None
        trial = session.fitted_trial()
        if trial is not None:
            fitted = session.view(trial)
        still = (
            id(session), id(session.result) if fitted is not None else None, session.left_out.tobytes(),
            view.bent.stations.load.tobytes(), view.bent.problem.reference_level, session.options.chosen("load"),
            view.bent.break_position is None,
        )  # fmt: skip
        if still == self._drawn_for:
            self.profile.follow(view)
        else:
            self._drawn_for = still
            self.profile.restart(view, session.left_out, fitted)

    def _show_posterior(self) -> None:
        session = self._session
        result = None if session is None else session.result
        if session is None or result is None:
            self.thickness.strip.set_posterior(None, (None, None), False)
            return
        best = result.best
        interval = (best.thickness.low, best.thickness.high)
        self.thickness.strip.set_posterior(thickness_density(best.misfit), interval, session.is_current)

    def _show_answer(self, view: View) -> None:
        bent = view.bent
        rms = tr("rms {rms} m, {count} observations").format(rms=number(view.rms), count=view.count)
        name = bent.problem.profile.name
        if view.result is not None:
            te, remarks = self._fitted_words(view, view.result.best.thickness), view.result.remarks
        else:
            te = tr("{te} km tried").format(te=number(bent.thickness / 1e3))
            remarks = bent.problem.remarks + bent.remarks
        self.answer.setText(tr("{name}: {te}, {rms}").format(name=name, te=te, rms=rms))
        self.answer.setToolTip("\n".join([self.answer.text(), *map(translated, remarks)]))

    def _fitted_words(self, view: View, thickness: Estimate) -> str:
        if thickness.value is None:
            return tr("elastic thickness not resolved")
        low, high = (tr("open") if side is None else number(side / 1e3) for side in (thickness.low, thickness.high))
        confidence = f"{view.bent.problem.options.confidence * 100:g}"
        return tr("{te} km fitted ({confidence} %: {low} to {high})").format(
            te=number(thickness.value / 1e3), confidence=confidence, low=low, high=high
        )

    def _complain(self, sentence: str) -> None:
        self.complaint.setText(sentence)
        self.complaint.setVisible(bool(sentence))

    # Profile and map

    def _dragged(self, start: float, end: float, leave: bool) -> None:
        if self._session is None:
            return
        count = self._session.leave_out(start, end, leave)
        if count:
            words = tr("{count} stations left out of the fit.") if leave else tr("{count} stations taken back.")
            self._refresh()
            self.reading.setText(words.format(count=count))

    def _take_all_back(self) -> None:
        if self._session is not None:
            self._session.left_out = np.zeros_like(self._session.left_out)
            self._refresh()
            self.reading.setText(self._hint())

    def _hovered(self, distance: float) -> None:
        self._map.show_place(distance)
        if self._view is None or not math.isfinite(distance):
            self.reading.setText(self._hint())
        else:
            self.reading.setText(self._reading(self._view, distance))

    def _reading(self, view: View, distance: float) -> str:
        stations, profile = view.bent.stations, view.bent.problem.profile
        at = int(np.argmin(np.abs(profile.distance - distance)))
        values = [
            (tr("observed"), stations.observed[at]),
            (tr("predicted"), stations.predicted[at]),
            (tr("residual"), stations.observed[at] - stations.predicted[at]),
            (tr("deflection"), stations.deflection[at]),
        ]
        if not view.bent.problem.bare:
            values.insert(0, (tr("relief"), profile.relief[at]))
        known = [
            tr("{name} {value}").format(name=name, value=number(float(value)))
            for name, value in values
            if math.isfinite(value)
        ]
        return tr("{km} km: {values} m").format(km=number(profile.distance[at] / 1e3, 4), values=", ".join(known))

    def _show_line(self) -> None:
        self._map.show_track(self._track if self.isVisible() else None, self._crs)

    def _visibility_changed(self, visible: bool) -> None:
        if visible and self._session is None:
            self._resample.start()
        self._show_line()

    def keep(self) -> None:
        """Add what is shown to the project as layers."""
        if self._view is None or self._track is None:
            return
        try:
            layers = keep(self._view, self._track, self._crs, self._project)
        except DownwarpError as error:
            self._complain(translated(error.message))
            return
        self.reading.setText(tr("{count} layers were added to the project.").format(count=len(layers)))

    def session(self) -> Session | None:
        """The session that is shown."""
        return self._session

    def view(self) -> View | None:
        """What is shown."""
        return self._view

    def shut(self) -> None:
        """Stop all work and take what the panel drew off the map."""
        self._resample.stop()
        self.input.forget_layer()
        self.cancel()
        self._map.shut()
