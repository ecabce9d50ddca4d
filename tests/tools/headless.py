"""Runs the plugin through qgis_process in a profile of its own. Standard library only."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]


class Headless:
    """A QGIS without a window, with its own profile and nothing but Downwarp as a plugin."""

    def __init__(self, folder: Path, plugin: Path = CHECKOUT) -> None:
        """Set up below ``folder`` for the ``plugin`` folder, which may be called anything."""
        # Debian 12's wrapper named qgis_process passes an option that the program rejects.
        program = shutil.which("qgis_process.bin") or shutil.which("qgis_process")
        if program is None:
            raise FileNotFoundError("qgis_process is not on PATH; it comes with QGIS")
        self.program = program
        plugins = folder / "plugins"
        plugins.mkdir(parents=True, exist_ok=True)
        link = plugins / "downwarp"
        link.unlink(missing_ok=True)
        # QGIS imports a plugin by its folder's name, which a checkout's own name need not allow.
        link.symlink_to(plugin, target_is_directory=True)
        runtime = folder / "runtime"
        runtime.mkdir(mode=0o700, exist_ok=True)
        self.environment = {
            **os.environ,
            "QT_QPA_PLATFORM": "offscreen",
            "QGIS_CUSTOM_CONFIG_PATH": str(folder / "profile"),
            "QGIS_PLUGINPATH": str(plugins),
            "XDG_RUNTIME_DIR": str(runtime),
        }
        self.environment.pop("PYTHONHOME", None)

    def call(self, *arguments: str) -> subprocess.CompletedProcess[str]:
        """Call qgis_process with ``arguments``, whatever comes of it."""
        return subprocess.run(
            [self.program, *arguments],
            env=self.environment,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            check=False,
        )

    def enable(self) -> subprocess.CompletedProcess[str]:
        """Enable the plugin; call this once before `run`."""
        return self.call("plugins", "enable", "downwarp")

    def algorithms(self) -> set[str]:
        """Identifiers of Downwarp's algorithms, without ``downwarp:``."""
        listed = json.loads(self.call("--json", "list").stdout)
        provider = listed["providers"].get("downwarp", {"algorithms": {}})
        return {name.partition(":")[2] for name in provider["algorithms"]}

    def attempt(self, algorithm: str, parameters: dict[str, object]) -> subprocess.CompletedProcess[str]:
        """Run ``downwarp:<algorithm>``; what it printed on standard output is JSON where it succeeded."""
        return self.call("--json", "run", f"downwarp:{algorithm}", *arguments_of(parameters))

    def run(self, algorithm: str, parameters: dict[str, object]) -> dict:
        """Run ``downwarp:<algorithm>`` and return its results; raises RuntimeError with its last words if it fails."""
        done = self.attempt(algorithm, parameters)
        if done.returncode != 0:
            # What fails is often said twice, on both streams.
            words = list(dict.fromkeys(f"{done.stdout}\n{done.stderr}".split("\n")))
            raise RuntimeError("\n".join([f"downwarp:{algorithm} failed:", *words[-20:]]))
        return json.loads(done.stdout)["results"]


def arguments_of(parameters: dict[str, object]) -> list[str]:
    """Parameters as qgis_process takes them."""
    arguments = []
    for key, value in parameters.items():
        for item in value if isinstance(value, (list, tuple)) else [value]:
            text = str(item).lower() if isinstance(item, bool) else str(item)
            arguments.append(f"--{key}={text}")
    return arguments
