"""The profile as it is drawn in the panel: what stays is drawn once, what follows the controls is laid over it.

Needs matplotlib; the dock imports this module only where it is there.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from qgis.PyQt.QtCore import Qt, QTimer, pyqtSignal
from qgis.PyQt.QtWidgets import QSizePolicy

from ..core.settings import LOAD_RELIEF
from ..report.figures import FAINT, INK, LOAD, LOAD_PALE, MARKER_STYLES, PLATE, PLATE_PALE, marked_places
from ..translation import tr
from .session import View

try:
    from matplotlib.backends.backend_qtagg import FigureCanvasQTAgg
except ImportError:  # before matplotlib 3.5
    from matplotlib.backends.backend_qt5agg import FigureCanvasQTAgg  # type: ignore[no-redef]

_TEXT = 8.5
_SETTLE_MS = 400
"""Time after the last change, ms, after which axes that no longer suit the curve are scaled anew."""
_MARGIN = 0.08
_SIDE_MARGIN = 0.012
"""Room before the line's start and beyond its end, as a share of its length: half a marker."""
_DRAG_PIXELS = 4
_ZOOM_PER_NOTCH = 1.25
_MOST_NOTCHES = 4.0
"""Notches of the wheel that one event may count for: touchpads send many at once."""
_LEAST_STATIONS = 4
"""Stations that are in view at the least."""
_LEAST_SHARE = 1e-3
"""Share of the whole height that is in view at the least."""
_DOTS = {
    "fitted": {"color": INK, "markersize": 2.8, "markeredgewidth": 0.0},
    "other": {"markerfacecolor": "white", "markeredgecolor": FAINT, "markeredgewidth": 0.6, "markersize": 2.6},
}


class ProfileCanvas(FigureCanvasQTAgg):
    """Shows views of one transect.

    ``hovered`` gives the distance under the mouse, m, NaN where there is none; ``dragged`` the ends of a stretch, m,
    and whether it is to be left out (or taken back); ``zoomed`` whether less than the whole profile is in view.

    The wheel zooms about the pointer, distances or, with Ctrl, the heights of the axes under it; the middle button, and
    the left one while `hand` is set, drag what is seen; a double click shows the whole profile again.
    """

    hovered = pyqtSignal(float)
    dragged = pyqtSignal(float, float, bool)
    zoomed = pyqtSignal(bool)

    def __init__(self) -> None:
        super().__init__(Figure(facecolor="white"))
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setMinimumSize(320, 180)
        self.setFocusPolicy(Qt.FocusPolicy.ClickFocus)
        self._view: View | None = None
        self._surface: Any = None
        self._residual: Any = None
        self._load: Any = None
        self._moving: dict[str, Any] = {}
        self._background: Any = None
        self._from: float | None = None
        self._hand = False
        self._held: tuple[Any, float, float] | None = None
        # Both by "distance" or the name of the axes whose heights they are.
        self._whole: dict[str, tuple[float, float]] = {}
        self._windows: dict[str, tuple[float, float]] = {}
        self._settle = QTimer(self)
        self._settle.setSingleShot(True)
        self._settle.setInterval(_SETTLE_MS)
        self._settle.timeout.connect(self._rescale)
        self.mpl_connect("draw_event", self._drawn)
        self.mpl_connect("motion_notify_event", self._moved)
        self.mpl_connect("axes_leave_event", self._left)
        self.mpl_connect("figure_leave_event", self._left)
        self.mpl_connect("button_press_event", self._pressed)
        self.mpl_connect("button_release_event", self._released)
        self.mpl_connect("scroll_event", self._wheeled)

    def clear(self) -> None:
        """Show nothing, and what comes next in whole."""
        self._settle.stop()
        self.figure.clear()
        self._view, self._surface, self._moving, self._background = None, None, {}, None
        self._from, self._held = None, None
        self._windows.clear()
        self.zoomed.emit(False)
        self.draw_idle()

    def restart(self, view: View, left_out: np.ndarray, fitted: View | None) -> None:
        """Draw everything anew: another transect, load or selection of stations. What is in view stays.

        ``left_out``: stations left out by hand, (n,) bool; ``fitted``: the current fit, whose band and curve stay.
        """
        self._settle.stop()
        self._from, self._held = None, None
        self.figure.clear()
        self._view = view
        self._make_axes(view)
        handles = self._draw_still(view, left_out, fitted)
        handles += self._make_moving(view)
        self._arrange(handles)
        self._place(view)
        self._scale(view, fitted)
        self._background = None
        self.draw()

    def follow(self, view: View) -> None:
        """Move the curve, residuals and markers to a view of the transect that is shown; nothing else is drawn anew."""
        self._view = view
        self._place(view)
        if self._background is None:
            self.draw()
        else:
            self.restore_region(self._background)
            self._draw_moving()
            self.blit(self.figure.bbox)
        if not self._suits(view):
            self._settle.start()

    def resizeEvent(self, event) -> None:
        """Arrange axes and legend for the new size."""
        self._background = None
        if self._view is not None and self.width() > 0 and self.height() > 0:
            super().resizeEvent(event)
            self._arrange(None)
            self.draw_idle()
        else:
            super().resizeEvent(event)

    def _make_axes(self, view: View) -> None:
        problem = view.bent.problem
        self._relief_is_load = problem.options.chosen("load")[0] == LOAD_RELIEF
        strip = bool(np.any(view.bent.stations.load)) and not self._relief_is_load
        ratios = [0.6, 2.3, 1.1] if strip else [2.3, 1.1]
        self._grid = self.figure.add_gridspec(nrows=len(ratios), ncols=1, height_ratios=ratios)
        self._surface = self.figure.add_subplot(self._grid[-2])
        self._residual = self.figure.add_subplot(self._grid[-1], sharex=self._surface)
        self._load = self.figure.add_subplot(self._grid[0], sharex=self._surface) if strip else None
        names = (
            (self._surface, tr("elevation, m")), (self._residual, tr("residual, m")), (self._load, tr("load, MPa")),
        )  # fmt: skip
        for axes, name in names:
            if axes is None:
                continue
            axes.grid(True, color="#e3e8ea", linewidth=0.6)
            axes.set_axisbelow(True)
            axes.tick_params(labelsize=_TEXT, colors=INK, length=3, labelbottom=axes is self._residual)
            # Above the axes rather than along them: there it fits however low they are.
            axes.set_title(name, loc="left", fontsize=_TEXT, color=INK, pad=2.0)
            for side, spine in axes.spines.items():
                spine.set_visible(side in ("left", "bottom"))
                spine.set_color(FAINT)
        self._residual.set_xlabel(tr("distance, km"), fontsize=_TEXT, color=INK, labelpad=1.0)
        self._residual.locator_params(axis="y", nbins=4)
        km = problem.profile.distance / 1e3
        margin = _SIDE_MARGIN * (km[-1] - km[0])
        self._whole["distance"] = float(km[0] - margin), float(km[-1] + margin)

    def _draw_still(self, view: View, left_out: np.ndarray, fitted: View | None) -> list[Any]:
        problem, stations = view.bent.problem, view.bent.stations
        profile, axes = problem.profile, self._surface
        km = profile.distance / 1e3
        handles: list[Any] = []
        if self._relief_is_load or problem.bare:
            handles += axes.plot(km, profile.relief, color=FAINT, linewidth=1.0, label=tr("relief"), zorder=2)
        level = problem.reference_level
        if self._relief_is_load and level is not None and problem.under_load.any():
            handles.append(
                axes.fill_between(
                    km, level, np.nan_to_num(profile.relief, nan=level), where=problem.under_load, facecolor=LOAD_PALE,
                    edgecolor=LOAD, hatch="////", linewidth=0.0, label=tr("load"), zorder=1,
                )
            )  # fmt: skip
        if self._load is not None:
            self._load.fill_between(
                km, 0.0, stations.load / 1e6, facecolor=LOAD_PALE, edgecolor=LOAD, hatch="////", linewidth=0.8
            )
        if fitted is not None:
            best = fitted.bent.stations
            handles.append(
                axes.fill_between(
                    km, best.predicted_low, best.predicted_high, facecolor=PLATE_PALE, edgecolor=PLATE, linewidth=0.6,
                    linestyle=":", zorder=3, label=tr("band of the fit"),
                )
            )  # fmt: skip
            axes.plot(km, best.predicted, color=PLATE, linewidth=1.0, linestyle=(0, (4, 2)), zorder=3)
        self._left_out = left_out
        out = np.isfinite(stations.observed) & left_out
        if out.any():
            handles += axes.plot(
                km[out], stations.observed[out], linestyle="none", marker="x", markersize=4, color=LOAD,
                markeredgewidth=1.0, label=tr("left out by hand"), zorder=4,
            )  # fmt: skip
        picks = profile.picks
        if picks.distance.size:
            handles += axes.plot(
                picks.distance / 1e3, picks.elevation, linestyle="none", marker="+", color=INK, markersize=6,
                label=tr("picks"), zorder=5,
            )  # fmt: skip
        self._residual.axhline(0.0, color=PLATE, linewidth=1.2, zorder=1)
        return handles

    def _make_moving(self, view: View) -> list[Any]:
        """Artists that follow the controls: drawn over a picture of all others."""
        km = view.bent.problem.profile.distance / 1e3
        moving = self._moving = {}
        (moving["curve"],) = self._surface.plot(
            km, np.full(km.shape, np.nan), color=PLATE, linewidth=2.0, label=tr("predicted"), zorder=7
        )
        handles = [moving["curve"]]
        words = {"fitted": tr("observed, fitted"), "other": tr("observed, not fitted")}
        for name, style in _DOTS.items():
            for axes, prefix in ((self._surface, "observed"), (self._residual, "residual")):
                (moving[f"{prefix} {name}"],) = axes.plot(
                    [], [], linestyle="none", marker="o", zorder=4, label=words[name], **style
                )
            handles.append(moving[f"observed {name}"])
        (moving["residual picks"],) = self._residual.plot([], [], linestyle="none", marker="+", color=INK, markersize=6)
        words = {"deepest": tr("deepest"), "node": tr("node"), "bulge": tr("bulge")}
        for kind, word in words.items():
            marker, face = MARKER_STYLES[kind]
            (moving[kind],) = self._surface.plot(
                [], [], linestyle="none", marker=marker, markersize=8, markerfacecolor=face, markeredgecolor=INK,
                markeredgewidth=0.9, label=word, zorder=8,
            )  # fmt: skip
            handles.append(moving[kind])
        moving["break"] = self._surface.axvline(
            km[0], color=LOAD, linewidth=1.4, linestyle=(0, (5, 1.5, 1, 1.5)), label=tr("break"), zorder=6
        )
        if "break" in marked_places(view.bent):
            handles.append(moving["break"])
        for name, axes in (("place", self._surface), ("residual place", self._residual)):
            moving[name] = axes.axvline(km[0], color=INK, linewidth=0.8, visible=False, zorder=9)
        moving["stretch"] = self._surface.add_patch(
            Rectangle(
                (km[0], 0.0), 0.0, 1.0, transform=self._surface.get_xaxis_transform(), facecolor=LOAD, alpha=0.25,
                visible=False, zorder=9,
            )
        )  # fmt: skip
        for artist in moving.values():
            artist.set_animated(True)
        return handles

    def _arrange(self, handles: list[Any] | None) -> None:
        """Lay out axes and legend for the size in pixels; ``handles`` None keeps the legend's entries."""
        if self._surface is None:
            return
        width, height = self.figure.bbox.width, self.figure.bbox.height
        pixels = self.figure.dpi / 72.0
        if handles is not None:
            self._handles = handles
        for legend in list(self.figure.legends):
            legend.remove()
        rows = self._make_legend(width)
        line = 1.35 * _TEXT * pixels
        rooms = [line] * (2 if self._load is None else 3)
        top = min(0.5 * height, (1.55 * _TEXT * rows + 4.0) * pixels + rooms[0])
        bottom = min(0.3 * height, 3.3 * _TEXT * pixels)
        gap = line + 0.4 * _TEXT * pixels
        count = len(rooms)
        # hspace is in units of the mean height of the axes.
        average = max((height - top - bottom - (count - 1) * gap) / count, 1.0)
        left, right = min(0.3 * width, 46.0 * pixels), 14.0 * pixels
        self._grid.update(
            left=left / width, right=1.0 - right / width, bottom=bottom / height, top=1.0 - top / height,
            hspace=gap / average,
        )  # fmt: skip
        for axes in (self._surface, self._residual, self._load):
            if axes is not None:
                axes.set_position(axes.get_subplotspec().get_position(self.figure))

    def _make_legend(self, width: float) -> int:
        """Make the legend in as few rows as the width, px, allows, and return their number."""
        count = len(self._handles)
        for rows in range(1, count + 1):
            legend = self.figure.legend(
                handles=self._handles, loc="upper center", ncol=-(-count // rows), fontsize=_TEXT, frameon=False,
                labelcolor=INK, handlelength=1.8, handletextpad=0.5, columnspacing=1.2, borderaxespad=0.1, numpoints=1,
            )  # fmt: skip
            if rows == count or legend.get_window_extent(self.get_renderer()).width <= width:
                return rows
            legend.remove()
        return count

    def _place(self, view: View) -> None:
        """Move the moving artists."""
        bent, moving = view.bent, self._moving
        stations, profile = bent.stations, bent.problem.profile
        km = profile.distance / 1e3
        moving["curve"].set_ydata(stations.predicted)
        residual = stations.observed - stations.predicted
        known = np.isfinite(residual)
        seen = np.isfinite(stations.observed)
        for name, chosen in (("fitted", stations.in_fit), ("other", ~stations.in_fit & ~self._left_out)):
            moving[f"observed {name}"].set_data(km[chosen & seen], stations.observed[chosen & seen])
            moving[f"residual {name}"].set_data(km[chosen & known], residual[chosen & known])
        picks, plate = profile.picks, np.isfinite(stations.predicted)
        if picks.distance.size and plate.any():
            apart = picks.elevation - np.interp(
                picks.distance, profile.distance[plate], stations.predicted[plate], np.nan, np.nan
            )
            moving["residual picks"].set_data(picks.distance / 1e3, apart)
        places = marked_places(bent)
        for kind in ("deepest", "node", "bulge"):
            distance, deflection = places.get(kind, (np.nan, None))
            height = sum(c * distance**power for power, c in enumerate(bent.regional)) - (deflection or 0.0)
            moving[kind].set_data([distance / 1e3], [height])
        moving["break"].set_visible("break" in places)
        if "break" in places:
            moving["break"].set_xdata([places["break"][0] / 1e3] * 2)

    def _limits(self, view: View, fitted: View | None) -> tuple[float, float]:
        stations, profile = view.bent.stations, view.bent.problem.profile
        series = [stations.predicted, stations.observed]
        if self._relief_is_load or view.bent.problem.bare:
            series.append(profile.relief)
        if fitted is not None:
            series.append(fitted.bent.stations.predicted)
        every = np.concatenate([*series, profile.picks.elevation])
        every = every[np.isfinite(every)]
        low, high = (float(every.min()), float(every.max())) if every.size else (0.0, 1.0)
        if fitted is not None and np.isfinite(fitted.bent.stations.predicted_low).any():
            # A band so wide that it would flatten everything else is cut.
            reach, band = 0.5 * (high - low), fitted.bent.stations
            low = min(low, max(float(np.nanmin(band.predicted_low)), low - reach))
            high = max(high, min(float(np.nanmax(band.predicted_high)), high + reach))
        margin = _MARGIN * max(high - low, 1.0)
        return low - margin, high + margin

    def _residual_reach(self, view: View) -> float:
        stations = view.bent.stations
        fitted = (stations.observed - stations.predicted)[stations.in_fit]
        picks = self._moving["residual picks"].get_ydata()
        values = np.abs(np.concatenate([fitted, np.asarray(picks, dtype=float)]))
        values = values[np.isfinite(values)]
        return max(1.2 * float(values.max()) if values.size else 1.0, 1e-3)

    def _scale(self, view: View, fitted: View | None) -> None:
        self._fitted = fitted
        reach = self._residual_reach(view)
        self._whole["surface"] = self._limits(view, fitted)
        self._whole["residual"] = -reach, reach
        if self._load is not None and "load" not in self._windows:
            self._whole["load"] = self._load.get_ylim()
        self._show_windows()

    def _show_windows(self) -> None:
        """Bring what is to be in view into view."""
        shown = {**self._whole, **self._windows}
        self._surface.set_xlim(*shown["distance"])
        for name, axes in self._axes_by_name().items():
            axes.set_ylim(*shown[name])

    def _axes_by_name(self) -> dict[str, Any]:
        named = {"surface": self._surface, "residual": self._residual, "load": self._load}
        return {name: axes for name, axes in named.items() if axes is not None}

    def _set_window(self, name: str, low: float, high: float) -> None:
        """Have a part of the whole in view, moved into it where it reaches beyond; the whole where it is as large."""
        first, last = self._whole[name]
        size = high - low
        if size >= (1.0 - 1e-9) * (last - first):
            self._windows.pop(name, None)
            return
        low = min(max(low, first), last - size)
        self._windows[name] = low, low + size

    def _windows_changed(self) -> None:
        self._show_windows()
        self._background = None
        self.draw_idle()
        self.zoomed.emit(bool(self._windows))

    def show_whole(self) -> None:
        """Show the whole profile in place of a part."""
        if self._surface is not None and self._windows:
            self._windows.clear()
            self._windows_changed()

    @property
    def hand(self) -> bool:
        """Whether the left button drags what is seen rather than choosing stations."""
        return self._hand

    @hand.setter
    def hand(self, hand: bool) -> None:
        self._hand = hand
        self.setCursor(Qt.CursorShape.OpenHandCursor if hand else Qt.CursorShape.ArrowCursor)

    def _wheeled(self, event) -> None:
        """Zoom about the pointer."""
        if self._view is None or event.inaxes is None or event.guiEvent is None:
            return
        if event.guiEvent.modifiers() & Qt.KeyboardModifier.ControlModifier:
            name = next(name for name, axes in self._axes_by_name().items() if axes is event.inaxes)
            at, (low, high) = float(event.ydata), event.inaxes.get_ylim()
            least = _LEAST_SHARE * (self._whole[name][1] - self._whole[name][0])
        else:
            name, at, (low, high) = "distance", float(event.xdata), self._surface.get_xlim()
            km = self._view.bent.problem.profile.distance / 1e3
            least = _LEAST_STATIONS * (km[-1] - km[0]) / max(km.size - 1, 1)
        notches = min(max(event.guiEvent.angleDelta().y() / 120.0, -_MOST_NOTCHES), _MOST_NOTCHES)
        # Zooming in ends at the least; what is nearer already stays as it is.
        factor = max(_ZOOM_PER_NOTCH**-notches, min(least / (high - low), 1.0))
        self._set_window(name, at - factor * (at - low), at + factor * (high - at))
        self._windows_changed()

    def _drag_view(self, event) -> None:
        """Let what is seen follow the pointer."""
        if self._held is None:
            return
        axes, x, y = self._held
        self._held = axes, float(event.x), float(event.y)
        name = next(name for name, each in self._axes_by_name().items() if each is axes)
        for along, (low, high), share in (
            ("distance", axes.get_xlim(), (x - event.x) / axes.bbox.width),
            (name, axes.get_ylim(), (y - event.y) / axes.bbox.height),
        ):
            by = float(share) * (high - low)
            self._set_window(along, low + by, high + by)
        self._windows_changed()

    def _suits(self, view: View) -> bool:
        """Whether the axes neither cut off the curve or its residuals nor leave most of their room empty."""
        low, high = self._limits(view, self._fitted)
        bottom, top = self._whole["surface"]
        span = top - bottom
        share = self._residual_reach(view) / self._whole["residual"][1]
        slack = 0.5 * _MARGIN * span
        inside = low >= bottom - slack and high <= top + slack
        return inside and (high - low) > 0.6 * span and 0.4 < share < 1.3

    def _rescale(self) -> None:
        if self._view is not None and self._surface is not None:
            self._scale(self._view, self._fitted)
            self.draw_idle()

    def _drawn(self, event) -> None:
        """Keep a picture of what stays, then lay what moves over it."""
        if self._surface is None:
            return
        self._background = self.copy_from_bbox(self.figure.bbox)
        self._draw_moving()

    def _draw_moving(self) -> None:
        for artist in sorted(self._moving.values(), key=lambda each: each.get_zorder()):
            artist.axes.draw_artist(artist)

    def _overlay(self) -> None:
        if self._background is not None and self._surface is not None:
            self.restore_region(self._background)
            self._draw_moving()
            self.blit(self.figure.bbox)

    def show_place(self, distance: float) -> None:
        """Mark a distance, m, with a line; NaN for none."""
        if self._surface is None:
            return
        for name in ("place", "residual place"):
            line = self._moving[name]
            line.set_visible(bool(np.isfinite(distance)))
            if np.isfinite(distance):
                line.set_xdata([distance / 1e3] * 2)
        self._overlay()

    def _moved(self, event) -> None:
        if self._surface is None:
            return
        if self._held is not None:
            self._drag_view(event)
            return
        if event.inaxes is None or event.xdata is None:
            return
        if self._from is not None:
            low, high = sorted((self._from, float(event.xdata)))
            stretch = self._moving["stretch"]
            stretch.set_x(low)
            stretch.set_width(high - low)
            stretch.set_visible(True)
        self.show_place(float(event.xdata) * 1e3)
        self.hovered.emit(float(event.xdata) * 1e3)

    def _left(self, event) -> None:
        self.show_place(float("nan"))
        self.hovered.emit(float("nan"))

    def _pressed(self, event) -> None:
        if self._surface is None or event.inaxes is None:
            return
        if event.button == 1 and event.dblclick:
            self.show_whole()
        elif event.button == 2 or (event.button == 1 and self._hand):
            self._held = event.inaxes, float(event.x), float(event.y)
            self.setCursor(Qt.CursorShape.ClosedHandCursor)
        elif event.button in (1, 3):
            self._from, self._from_pixel = float(event.xdata), float(event.x)

    def _released(self, event) -> None:
        if self._held is not None:
            self._held = None
            self.hand = self._hand
            return
        if self._from is None or self._surface is None:
            return
        start, self._from = self._from, None
        self._moving["stretch"].set_visible(False)
        if abs(float(event.x) - self._from_pixel) < _DRAG_PIXELS:
            self._overlay()
            return
        # Beyond the axes a drag ends where they do: stations that are not seen stay as they are.
        end = float(self._surface.transData.inverted().transform((event.x, event.y))[0])
        end = min(max(end, self._surface.get_xlim()[0]), self._surface.get_xlim()[1])
        shift = bool(event.guiEvent is not None and event.guiEvent.modifiers() & Qt.KeyboardModifier.ShiftModifier)
        self.dragged.emit(start * 1e3, end * 1e3, not (shift or event.button == 3))
