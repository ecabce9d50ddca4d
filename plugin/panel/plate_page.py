"""The panel's second page: kind of plate, break, end forces, regional and infill."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from qgis.PyQt.QtCore import pyqtSignal
from qgis.PyQt.QtWidgets import (
    QCheckBox,
    QDoubleSpinBox,
    QFormLayout,
    QHBoxLayout,
    QLabel,
    QSpinBox,
    QToolButton,
    QWidget,
)

from ..core.settings import BREAK_GIVEN, BREAK_SEARCHED, BROKEN, SETTINGS
from ..translation import tr
from .key_form import options_box
from .session import Session, Trial, View
from .source import fit_keys, help_of

SHEAR_UNIT, MOMENT_UNIT = 1e12, 1e17
"""N/m and N: what the numbers of the end forces count."""


class PlatePage(QWidget):
    """Controls of the plate but for its thickness.

    ``changed`` gives the name of a key of the fit that changed; ``tried`` tells that only the trial did.
    """

    KEYS = ("PLATE", "BREAK_AT", "BREAK_KM", "BREAK_FROM", "BREAK_TO", "END_FORCES", "RHO_INFILL", "REGIONAL")
    changed = pyqtSignal(str)
    tried = pyqtSignal()

    def __init__(self) -> None:
        super().__init__()
        self._quiet = False
        self._infill_given = False
        # The number shows a searched break rounded.
        self._exact_break: float | None = None
        self.plate = options_box("PLATE")
        places = {BREAK_GIVEN: tr("At the distance below"), BREAK_SEARCHED: tr("Searched")}
        self.break_at = options_box("BREAK_AT", places)
        self.break_km = _distance_box("BREAK_KM")
        self.break_from, self.break_to = _distance_box("BREAK_FROM"), _distance_box("BREAK_TO")
        self.end_forces, self.regional = options_box("END_FORCES"), options_box("REGIONAL")
        self.by_hand = QCheckBox(tr("stated by hand"))
        self.by_hand.setObjectName("by_hand")
        self.by_hand.setToolTip(
            tr("Off: they are solved for each thickness. On: the numbers below act; a fit solves them all the same.")
        )
        self.shear = _force_box("shear", tr(" \u00d7 10¹² N/m"), 100.0)
        self.shear.setToolTip(tr("End shear at the break, positive down"))
        self.moment = _force_box("moment", tr(" \u00d7 10¹⁷ N"), 1000.0)
        self.moment.setToolTip(tr("End moment at the break, positive where it turns the broken end down"))
        self.infill = QSpinBox()
        self.infill.setObjectName("infill")
        self.infill.setRange(0, 20000)
        self.infill.setSingleStep(50)
        self.infill.setSuffix(tr(" kg/m³"))
        self.infill.setToolTip(tr(help_of("RHO_INFILL")))
        self.reset_button = QToolButton()
        self.reset_button.setText(tr("Reset"))
        self.reset_button.setToolTip(tr("Take the infill density of the setting again"))
        infill = QHBoxLayout()
        infill.addWidget(self.infill, 1)
        infill.addWidget(self.reset_button)
        self._from_label, self._to_label = QLabel(tr("From")), QLabel(tr("To"))
        form = QFormLayout(self)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        # All rows of a plate whose break is not searched are to be seen in a low panel.
        form.setVerticalSpacing(2)
        margins = form.contentsMargins()
        form.setContentsMargins(margins.left(), 3, margins.right(), 3)
        for words, widget in (
            (tr("Plate"), self.plate),
            (tr("Break"), self.break_at),
            (tr("Distance"), self.break_km),
            (self._from_label, self.break_from),
            (self._to_label, self.break_to),
            (tr("End forces"), self.end_forces),
            (tr("Their size"), self.by_hand),
            (tr("Shear"), self.shear),
            (tr("Moment"), self.moment),
            (tr("Regional"), self.regional),
            (tr("Infill"), infill),
        ):
            form.addRow(words, widget)
        for box, name in (
            (self.plate, "PLATE"), (self.break_at, "BREAK_AT"), (self.end_forces, "END_FORCES"),
            (self.regional, "REGIONAL"),
        ):  # fmt: skip
            box.currentIndexChanged.connect(lambda _, name=name: self._tell(name))
        self.break_km.valueChanged.connect(self._break_moved)
        for spin, name in ((self.break_from, "BREAK_FROM"), (self.break_to, "BREAK_TO")):
            spin.valueChanged.connect(lambda _, name=name: self._tell(name))
        self.by_hand.toggled.connect(lambda _: self._tell())
        for force in (self.shear, self.moment):
            force.valueChanged.connect(lambda _: self._tell())
        self.infill.valueChanged.connect(lambda _: self._give_infill(True))
        self.reset_button.clicked.connect(lambda: self._give_infill(False))

    @contextmanager
    def _silence(self) -> Iterator[None]:
        """While values are shown, the controls say nothing."""
        before, self._quiet = self._quiet, True
        try:
            yield
        finally:
            self._quiet = before

    def _tell(self, name: str = "") -> None:
        if self._quiet:
            return
        if name:
            self.changed.emit(name)
        else:
            self.tried.emit()

    def _give_infill(self, given: bool) -> None:
        if not self._quiet:
            self._infill_given = given
            self.changed.emit("RHO_INFILL")

    def _break_moved(self, km: float) -> None:
        if not self._quiet:
            self._exact_break = None
            self._tell("BREAK_KM" if self.break_at.currentIndex() == BREAK_GIVEN else "")

    def parameters(self) -> dict[str, Any]:
        """The choices as keys of the fit."""
        found: dict[str, Any] = {
            "PLATE": self.plate.currentIndex(),
            "BREAK_AT": self.break_at.currentIndex(),
            "END_FORCES": self.end_forces.currentIndex(),
            "REGIONAL": self.regional.currentIndex(),
        }
        if self.break_at.currentIndex() == BREAK_GIVEN:
            found["BREAK_KM"] = self.break_km.value()
        if self.break_at.currentIndex() == BREAK_SEARCHED:
            found["BREAK_FROM"], found["BREAK_TO"] = self.break_from.value(), self.break_to.value()
        if self._infill_given:
            found["RHO_INFILL"] = self.infill.value()
        return found

    def trial(self, thickness: float, session: Session) -> Trial:
        """The plate of these controls at a thickness, m."""
        forces, place = None, None
        if self.by_hand.isChecked() and session.has_break:
            forces = self.shear.value() * SHEAR_UNIT, self.moment.value() * MOMENT_UNIT
        if self.break_at.currentIndex() == BREAK_SEARCHED:
            place = self.break_km.value() * 1e3 if self._exact_break is None else self._exact_break
        return Trial(thickness, place, forces)

    def show_line(self, length: float) -> None:
        """Bound the break to a line of a length in m."""
        with self._silence():
            for box in (self.break_km, self.break_from, self.break_to):
                box.setMaximum(math.floor(length / 10.0) / 100.0)
            if self.break_to.value() == 0.0:
                self.break_to.setValue(0.25 * length / 1e3)

    def show_break(self, position: float) -> None:
        """Show a place of the break, m."""
        with self._silence():
            self.break_km.setValue(position / 1e3)
        self._exact_break = position

    def show_trial(self, trial: Trial) -> None:
        """Show the trial that a fit ended with: its end forces were solved."""
        with self._silence():
            self.by_hand.setChecked(False)
        if trial.break_position is not None:
            self.show_break(trial.break_position)

    def show_view(self, view: View) -> None:
        """Show the values that were solved, in the controls that are not stated by hand."""
        with self._silence():
            if not self.by_hand.isChecked():
                self.shear.setValue(view.bent.end_shear / SHEAR_UNIT)
                self.moment.setValue(view.bent.end_moment / MOMENT_UNIT)
            if not self._infill_given:
                self.infill.setValue(round(view.bent.problem.densities.infill))
        place = view.bent.break_position
        if place is not None and self.break_at.currentIndex() not in (BREAK_GIVEN, BREAK_SEARCHED):
            self.show_break(place)

    def show_setting(self, place: int) -> None:
        """Say what "as the setting" comes to in the boxes that offer it."""
        setting = SETTINGS[place]
        for name, box, option in (
            ("PLATE", self.plate, setting.plate), ("BREAK_AT", self.break_at, setting.break_at),
            ("END_FORCES", self.end_forces, setting.end_forces), ("REGIONAL", self.regional, setting.regional),
        ):  # fmt: skip
            key = fit_keys()[name]
            box.setItemText(key.default, tr("{option} (setting)").format(option=tr(key.options[option])))

    def enable(self, session: Session | None) -> None:
        """Let only those controls be used that have a say."""
        place = self.break_at.currentIndex()
        has_break = session is None or session.has_break
        broken = session is None or session.kind == BROKEN
        self.break_km.setEnabled(place in (BREAK_GIVEN, BREAK_SEARCHED))
        for widget in (self._from_label, self.break_from, self._to_label, self.break_to):
            widget.setVisible(place == BREAK_SEARCHED)
        self.by_hand.setEnabled(has_break)
        self.shear.setEnabled(has_break and self.by_hand.isChecked())
        self.moment.setEnabled(has_break and broken and self.by_hand.isChecked())
        self.reset_button.setEnabled(self._infill_given)


def _distance_box(name: str) -> QDoubleSpinBox:
    box = QDoubleSpinBox()
    box.setObjectName(f"key_{name}")
    box.setRange(0.0, 20000.0)
    box.setDecimals(2)
    box.setSuffix(tr(" km"))
    box.setSingleStep(5.0)
    box.setToolTip(tr(help_of(name)))
    return box


def _force_box(name: str, suffix: str, reach: float) -> QDoubleSpinBox:
    box = QDoubleSpinBox()
    box.setObjectName(name)
    box.setRange(-reach, reach)
    box.setDecimals(3)
    box.setSingleStep(0.1)
    box.setSuffix(suffix)
    return box
