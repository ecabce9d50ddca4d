"""What all of Downwarp's algorithms have in common: names and help from the file beside them, checks, errors."""

from __future__ import annotations

import inspect
import json
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from typing import Any

from qgis.core import (
    QgsProcessingAlgorithm,
    QgsProcessingException,
    QgsProcessingUtils,
)
from qgis.PyQt.QtGui import QIcon

from ..core.errors import Cancelled, DownwarpError
from ..translation import tr, translated
from .fields import FIELDS
from .keys import Key, Values
from .threads import ready_pyproj

ICON = Path(__file__).resolve().parents[2] / "icons" / "downwarp.svg"
SHARED_HELP = "shared.json"
"""Help of keys and fields that several algorithms have, in the folder of the algorithms."""


@cache
def read_help(path: Path) -> dict[str, Any]:
    """A help file."""
    return json.loads(path.read_text(encoding="utf-8"))


class DownwarpAlgorithm(QgsProcessingAlgorithm):
    """Base of all algorithms: a subclass states ``keys`` and ``sinks``, and reads, calls and writes in ``carry_out``."""

    keys: tuple[Key, ...] = ()

    @classmethod
    def module_file(cls) -> Path:
        """The file that the algorithm stands in; its stem gives the id, and the help lies beside it."""
        return Path(inspect.getfile(cls))

    @classmethod
    def help(cls) -> dict[str, Any]:
        """The algorithm's own help file."""
        return read_help(cls.module_file().with_suffix(".json"))

    @classmethod
    def help_of(cls, kind: str, name: str) -> str:
        """Help of a parameter, output or field (``kind``): the algorithm's own, else the shared one, else empty."""
        shared = read_help(cls.module_file().with_name(SHARED_HELP))
        return cls.help().get(kind, {}).get(name) or shared.get(kind, {}).get(name, "")

    def name(self) -> str:
        """The id without its provider: the file's name without underscores."""
        return self.module_file().stem.replace("_", "")

    def displayName(self) -> str:
        """The name in the toolbox."""
        return tr(self.help()["name"])

    def shortDescription(self) -> str:
        """One line for tool tips."""
        return tr(self.help()["short"])

    def tags(self) -> list[str]:
        """Words under which the toolbox finds it."""
        return self.help()["tags"]

    def group(self) -> str:
        """All of them stand in one group."""
        return ""

    def groupId(self) -> str:
        """All of them stand in one group."""
        return ""

    def icon(self) -> QIcon:
        """Downwarp's icon."""
        return QIcon(str(ICON))

    def svgIconPath(self) -> str:
        """Downwarp's icon, to scale."""
        return str(ICON)

    def createInstance(self) -> DownwarpAlgorithm:
        """A new one of its kind."""
        return type(self)()

    def shortHelpString(self) -> str:
        """Help as HTML: what it does, every parameter, every output and every field of it."""
        texts: dict[str, str] = {"ALG_DESC": tr("\n".join(self.help()["summary"]))}
        for definition in self.parameterDefinitions():
            texts[definition.name()] = self._parameter_help(definition.name())
        for output in self.outputDefinitions():
            texts[output.name()] = self._parameter_help(output.name())
        return QgsProcessingUtils.formatHelpMapAsHtml(texts, self)

    def _parameter_help(self, name: str) -> str:
        text = tr(self.help_of("parameters", name) or self.help_of("outputs", name))
        if name in FIELDS:
            listed = [f"<b>{field}</b>: {tr(self.help_of('fields', field))}" for field in FIELDS[name]]
            text += "<br>" + "<br>".join(listed)
        return text

    def initAlgorithm(self, configuration=None) -> None:
        """Add the keys and what the subclass adds."""
        for key in self.keys:
            definition = key.definition()
            definition.setHelp(tr(self.help_of("parameters", key.name)))
            self.addParameter(definition)
        self.add_outputs()

    def add_outputs(self) -> None:
        """Add sinks, files and output numbers."""

    def values(self, parameters: dict[str, Any], context) -> Values:
        """The given values, to be read by key."""
        return Values(self.keys, parameters, context)

    def checkParameterValues(self, parameters, context):
        """Refuse what QGIS would turn into 0 in silence, in one sentence."""
        try:
            values = self.values(parameters, context)
            values.check(definition.name() for definition in self.parameterDefinitions())
            self.check(values)
        except DownwarpError as error:
            return False, translated(error.message)
        return super().checkParameterValues(parameters, context)

    def check(self, values: Values) -> None:
        """Checks of the subclass on values that need no layer; raise DownwarpError."""

    def prepareAlgorithm(self, parameters, context, feedback) -> bool:
        """Resolve layers on the main thread."""
        with _translated_errors():
            values = self.values(parameters, context)
            # A model's child is run without checkParameterValues.
            values.check(definition.name() for definition in self.parameterDefinitions())
            self.check(values)
            self.resolve(values, parameters, context)
        return True

    def resolve(self, values: Values, parameters, context) -> None:
        """Resolve layers; raise DownwarpError."""

    def processAlgorithm(self, parameters, context, feedback):
        """Read, call and write."""
        ready_pyproj()
        with _translated_errors():
            return self.carry_out(parameters, context, feedback)

    def carry_out(self, parameters, context, feedback) -> dict[str, Any]:
        """Read, call and write; raise DownwarpError."""
        raise NotImplementedError


@contextmanager
def _translated_errors() -> Iterator[None]:
    """Turns core's errors into QGIS's."""
    try:
        yield
    except Cancelled:
        raise QgsProcessingException(tr("Cancelled; nothing was kept.")) from None
    except DownwarpError as error:
        raise QgsProcessingException(translated(error.message)) from None
