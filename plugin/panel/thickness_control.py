"""The control for elastic thickness: a logarithmic slider with the posterior painted along its scale, and a number."""

from __future__ import annotations

import numpy as np
from qgis.PyQt.QtCore import QPointF, QRectF, QSize, Qt, pyqtSignal
from qgis.PyQt.QtGui import QBrush, QColor, QFontMetrics, QPainter, QPen, QPolygonF
from qgis.PyQt.QtWidgets import (
    QDoubleSpinBox,
    QHBoxLayout,
    QLabel,
    QSizePolicy,
    QSlider,
    QStyle,
    QStyleOptionSlider,
    QVBoxLayout,
    QWidget,
)

from ..report.figures import FAINT, INK, LOAD, PLATE, PLATE_PALE, Density
from ..translation import tr

STEPS = 1000
"""Steps of the slider over the search range: at 1 to 100 km half a per cent of the thickness each."""


class ThicknessSlider(QSlider):
    """A slider that knows where its handle stands for a value."""

    def __init__(self) -> None:
        super().__init__(Qt.Orientation.Horizontal)
        self.setRange(0, STEPS)
        self.setPageStep(STEPS // 25)

    def centre(self, share: float) -> float:
        """Horizontal place, px, of the handle's middle for a share 0 to 1 of the range."""
        ends = []
        for position in (0, STEPS):
            option = QStyleOptionSlider()
            self.initStyleOption(option)
            option.sliderPosition = option.sliderValue = position
            handle = self.style().subControlRect(
                QStyle.ComplexControl.CC_Slider, option, QStyle.SubControl.SC_SliderHandle, self
            )
            ends.append(handle.x() + 0.5 * handle.width())
        return ends[0] + share * (ends[1] - ends[0])


class PosteriorStrip(QWidget):
    """Density of the posterior above the slider, with the interval shaded and a scale in km below."""

    def __init__(self, slider: ThicknessSlider) -> None:
        super().__init__()
        self._slider = slider
        self._low, self._high, self._value = 1e3, 100e3, 10e3
        self._density: Density | None = None
        self._interval: tuple[float | None, float | None] = (None, None)
        self._current = False
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)

    def sizeHint(self) -> QSize:
        """Room for the density and a line of numbers."""
        return QSize(320, 34 + self._numbers_height())

    def minimumSizeHint(self) -> QSize:
        """As high as wanted, but not as wide."""
        return QSize(120, self.sizeHint().height())

    def _numbers_height(self) -> int:
        return QFontMetrics(self.font()).height() + 2

    def set_range(self, low: float, high: float) -> None:
        """The search range, m."""
        self._low, self._high = low, high
        self.update()

    def set_value(self, thickness: float) -> None:
        """The thickness in force, m."""
        self._value = thickness
        self.update()

    def set_posterior(
        self, density: Density | None, interval: tuple[float | None, float | None], current: bool
    ) -> None:
        """What the last fit says; ``interval`` in m, a side that is open None; ``current``: whether it holds still."""
        self._density, self._interval, self._current = density, interval, current
        self.update()

    def share(self, thickness: float) -> float:
        """Share of the logarithmic range at a thickness, m."""
        return float(np.log(thickness / self._low) / np.log(self._high / self._low))

    def place(self, thickness: float) -> float:
        """Horizontal place, px, of a thickness, m: that of the slider's handle below."""
        return self._slider.centre(min(max(self.share(thickness), 0.0), 1.0))

    def paintEvent(self, event) -> None:
        """Draw the density, the interval, the value and the scale."""
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        foot = float(self.height() - self._numbers_height())
        left, right = self._slider.centre(0.0), self._slider.centre(1.0)
        painter.fillRect(QRectF(left, 0.0, right - left, foot), QColor("#ffffff"))
        if self._density is not None:
            self._paint_density(painter, foot)
        self._paint_scale(painter, foot, left, right)
        at = self.place(self._value)
        painter.setPen(QPen(QColor(LOAD), 1.5))
        painter.drawLine(QPointF(at, 0.0), QPointF(at, foot))
        if self._density is None:
            words = tr("After a fit, what the data say about the thickness stands here.")
            room = QRectF(left, 2.0, right - left, foot - 8.0)
            taken = painter.boundingRect(room, Qt.AlignmentFlag.AlignCenter, words)
            painter.fillRect(taken.adjusted(-4.0, 0.0, 4.0, 0.0), QColor("#ffffff"))
            painter.setPen(QColor("#5d6a70"))
            painter.drawText(room, Qt.AlignmentFlag.AlignCenter, words)

    def _paint_density(self, painter: QPainter, foot: float) -> None:
        density = self._density
        if density is None:
            return
        inside = (density.thickness >= self._low * 0.999) & (density.thickness <= self._high * 1.001)
        places = [self.place(float(each)) for each in density.thickness[inside]]
        heights = (foot - 1.0 - (foot - 4.0) * density.density[inside]).tolist()
        if len(places) < 2:
            return
        outline = [QPointF(x, y) for x, y in zip(places, heights)]
        area = QPolygonF([QPointF(places[0], foot), *outline, QPointF(places[-1], foot)])
        low, high = self._interval
        from_x = places[0] if low is None else self.place(low)
        to_x = places[-1] if high is None else self.place(high)
        if self._current and (low, high) != (None, None):
            painter.save()
            painter.setClipRect(QRectF(from_x, 0.0, to_x - from_x, foot))
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(QColor(PLATE_PALE))
            painter.drawPolygon(area)
            painter.restore()
        elif not self._current:
            # Hatched: the fit was made with other values than those in force.
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(QBrush(QColor(FAINT), Qt.BrushStyle.BDiagPattern))
            painter.drawPolygon(area)
        painter.setPen(QPen(QColor(PLATE if self._current else FAINT), 1.6))
        painter.drawPolyline(QPolygonF(outline))

    def _paint_scale(self, painter: QPainter, foot: float, left: float, right: float) -> None:
        painter.setPen(QPen(QColor(FAINT), 1.0))
        painter.drawLine(QPointF(left, foot), QPointF(right, foot))
        metrics = QFontMetrics(self.font())
        taken: list[tuple[float, float]] = []
        # Round numbers first: the others are named where they leave room.
        for km, major in sorted(_ticks(self._low / 1e3, self._high / 1e3), key=lambda tick: not tick[1]):
            x = self.place(km * 1e3)
            painter.setPen(QColor(FAINT))
            painter.drawLine(QPointF(x, foot), QPointF(x, foot - (5.0 if major else 3.0)))
            text = f"{km:g}"
            width = metrics.horizontalAdvance(text)
            start = min(max(x - 0.5 * width, 0.0), self.width() - width)
            if any(start < end + 8.0 and start + width > begin - 8.0 for begin, end in taken):
                continue
            painter.setPen(QColor(INK))
            painter.drawText(QPointF(start, foot + metrics.ascent() + 1.0), text)
            taken.append((start, start + width))


def _ticks(low: float, high: float) -> list[tuple[float, bool]]:
    """Values on a logarithmic scale from ``low`` to ``high``, and whether each is 1, 2 or 5 times a power of ten."""
    every = [
        (float(f"{mantissa * 10.0**power:.6g}"), mantissa in (1, 2, 5))
        for power in range(-2, 4)
        for mantissa in (1, 1.5, 2, 3, 4, 5, 6, 7, 8, 9)
    ]
    return [(km, major) for km, major in every if low * 0.999 <= km <= high * 1.001]


class ThicknessControl(QWidget):
    """Slider, strip and number; ``changed`` gives the thickness in m when the user moves either."""

    changed = pyqtSignal(float)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._low, self._high, self._value = 1e3, 100e3, 10e3
        self.slider = ThicknessSlider()
        self.slider.setObjectName("thickness_slider")
        self.strip = PosteriorStrip(self.slider)
        self.number = QDoubleSpinBox()
        self.number.setObjectName("thickness_number")
        self.number.setDecimals(2)
        self.number.setSuffix(tr(" km"))
        self.number.setKeyboardTracking(False)
        self.number.setStepType(QDoubleSpinBox.StepType.AdaptiveDecimalStepType)
        label = QLabel(tr("Elastic thickness"))
        label.setBuddy(self.number)
        words = tr(
            "Elastic thickness, on a logarithmic scale. Above the slider stands what the last fit says: the higher the "
            "line, the more probable the thickness; the interval is shaded. Hatched: fitted with other values."
        )
        for widget in (self.slider, self.strip, self.number, label):
            widget.setToolTip(words)
        scale = QVBoxLayout()
        scale.setContentsMargins(0, 0, 0, 0)
        scale.setSpacing(0)
        scale.addWidget(self.strip)
        scale.addWidget(self.slider)
        side = QVBoxLayout()
        side.addStretch()
        side.addWidget(label)
        side.addWidget(self.number)
        row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        row.addLayout(side)
        row.addLayout(scale, 1)
        self.slider.valueChanged.connect(self._slid)
        self.number.valueChanged.connect(self._typed)

    @property
    def thickness(self) -> float:
        """The thickness in force, m: the slider and the number show it rounded."""
        return self._value

    @property
    def range(self) -> tuple[float, float]:
        """The search range, m."""
        return self._low, self._high

    def set_range(self, low: float, high: float) -> None:
        """The search range, m; a thickness outside it moves to its nearer end."""
        self._low, self._high = low, high
        self.strip.set_range(low, high)
        blocked = self.number.blockSignals(True)
        self.number.setRange(low / 1e3, high / 1e3)
        self.number.blockSignals(blocked)
        self.set_thickness(min(max(self._value, low), high))

    def set_thickness(self, thickness: float) -> None:
        """Show a thickness, m, without a signal."""
        self._value = thickness
        for widget, value in (
            (self.slider, round(STEPS * self.strip.share(thickness))),
            (self.number, thickness / 1e3),
        ):
            blocked = widget.blockSignals(True)
            widget.setValue(value)
            widget.blockSignals(blocked)
        self.strip.set_value(thickness)

    def _slid(self, position: int) -> None:
        self._take(self._low * (self._high / self._low) ** (position / STEPS))

    def _typed(self, km: float) -> None:
        self._take(km * 1e3)

    def _take(self, thickness: float) -> None:
        self.set_thickness(thickness)
        self.changed.emit(thickness)
