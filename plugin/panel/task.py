"""Work off the main thread, with progress and cancel, as a task of QGIS."""

from __future__ import annotations

import traceback
from collections.abc import Callable
from typing import Any

from qgis.core import Qgis, QgsMessageLog, QgsTask

from ..bridge.threads import ready_pyproj
from ..core.errors import Cancelled, DownwarpError
from ..translation import tr, translated

TITLE = "Downwarp"


class Work(QgsTask):
    """Runs ``job(progress)`` off the main thread and hands what it returns to ``done`` on the main thread.

    ``failed`` gets a sentence where the job raises DownwarpError, and also on an error of Downwarp's own, which goes
    into the log in full; neither is called where the task was cancelled, but ``ended`` always is.
    """

    def __init__(
        self,
        description: str,
        job: Callable[[Callable[[float], None]], Any],
        done: Callable[[Any], None],
        failed: Callable[[str], None],
        ended: Callable[[], None],
    ) -> None:
        super().__init__(description, QgsTask.Flag.CanCancel)
        self._job, self._done, self._failed, self._ended = job, done, failed, ended
        self._answer: Any = None
        self._sentence = ""
        self._trace = ""

    def run(self) -> bool:
        """Called by QGIS off the main thread."""
        try:
            ready_pyproj()
            self._answer = self._job(self._progress)
        except Cancelled:
            return False
        except DownwarpError as error:
            self._sentence = translated(error.message)
            return False
        except Exception as error:  # whatever it is, it must not be lost in a thread
            self._sentence = tr("Downwarp met an error of its own; the message log has the details: {error}").format(
                error=error
            )
            self._trace = traceback.format_exc()
            return False
        return True

    def _progress(self, fraction: float) -> None:
        if self.isCanceled():
            raise Cancelled
        self.setProgress(100.0 * fraction)

    def finished(self, result: bool) -> None:
        """Called by QGIS on the main thread."""
        if self._trace:
            QgsMessageLog.logMessage(self._trace, TITLE, Qgis.MessageLevel.Critical)
        if not self.isCanceled():
            if result:
                self._done(self._answer)
            elif self._sentence:
                self._failed(self._sentence)
        self._ended()
