"""Starts QGIS in a window on a virtual screen, lets `drive.py` play the user in it and returns what that found.

    python3 tests/window/play.py FOLDER [STEP ...]

runs it by itself, prints the time that the profile panel takes to follow a change, and leaves the screenshots in
FOLDER. With STEPs it does only those. Standard library only.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
SCREEN = "1280x800x24"
PATIENCE = 150.0
"""Time, s, after which QGIS is ended: `drive.py` gives up before."""


def missing() -> list[str]:
    """Programs that a window on a virtual screen needs and this machine lacks."""
    return [program for program in ("Xvfb", "qgis") if shutil.which(program) is None]


def play(folder: Path, steps: tuple[str, ...] = ()) -> dict:
    """Play all steps, or some, with results and screenshots in ``folder``; raises RuntimeError where nothing came."""
    plugins, runtime = folder / "plugins", folder / "runtime"
    plugins.mkdir(parents=True)
    runtime.mkdir(mode=0o700)
    # QGIS imports a plugin by its folder's name, which a checkout's own name need not allow.
    (plugins / "downwarp").symlink_to(CHECKOUT, target_is_directory=True)
    reading, writing = os.pipe()
    screen = subprocess.Popen(
        ["Xvfb", "-displayfd", str(writing), "-screen", "0", SCREEN, "-nolisten", "tcp"],
        pass_fds=[writing],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    os.close(writing)
    try:
        with os.fdopen(reading) as pipe:
            display = pipe.readline().strip()
        if not display:
            raise RuntimeError("Xvfb gives no screen here")
        said = _run(folder, {
            **os.environ,
            "DISPLAY": f":{display}",
            "QT_QPA_PLATFORM": "xcb",
            "QT_SCALE_FACTOR": "1",
            "LC_ALL": "C.UTF-8",
            "QGIS_PLUGINPATH": str(plugins),
            "XDG_RUNTIME_DIR": str(runtime),
            "DOWNWARP_RESULTS": str(folder),
            "DOWNWARP_PLUGIN": "downwarp",
            "DOWNWARP_STEPS": " ".join(steps),
        })  # fmt: skip
    finally:
        screen.terminate()
        screen.wait()
    results = folder / "results.json"
    if not results.exists():
        raise RuntimeError(f"QGIS ended before anything was found:\n{said}")
    return {**json.loads(results.read_text(encoding="utf-8")), "said": said}


def _run(folder: Path, environment: dict[str, str]) -> str:
    """Run QGIS to its end and return what it said."""
    environment.pop("PYTHONHOME", None)
    program = ["qgis", "--nologo", "--noversioncheck", "--profiles-path", str(folder / "profile")]
    driver = str(Path(__file__).with_name("drive.py"))
    with (folder / "said.txt").open("w+", encoding="utf-8", errors="replace") as said:
        process = subprocess.Popen(
            [*program, "--code", driver], env=environment, stdin=subprocess.DEVNULL, stdout=said, stderr=said
        )
        try:
            process.wait(PATIENCE)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
        said.seek(0)
        return said.read()


def main(folder: Path, steps: tuple[str, ...]) -> None:
    """Play and tell."""
    lacking = missing()
    if lacking:
        sys.exit(f"{' and '.join(lacking)} not on PATH, which a window needs")
    found = play(folder, steps)
    for entry in found["steps"]:
        last_words = entry["error"].strip().rpartition("\n")[2]
        sys.stdout.write(f"{entry['seconds']:6.2f} s  {entry['name']}  {last_words}\n")
        if entry["name"].startswith("slides") and not entry["error"]:
            slides = entry["found"]
            sys.stdout.write(
                f"          with {slides['stations']} stations the curve follows the slider within "
                f"{1e3 * slides['median']:.1f} ms (median of {slides['changes']}), {1e3 * slides['largest']:.1f} ms at "
                "most\n"
            )


if __name__ == "__main__":
    if len(sys.argv) < 2:
        sys.exit("usage: play.py FOLDER (new) [STEP ...]")
    main(Path(sys.argv[1]).resolve(), tuple(sys.argv[2:]))
