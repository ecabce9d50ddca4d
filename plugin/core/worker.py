"""A process that fits profiles: reads jobs from standard input and writes answers to standard output, both pickled.

Started by file with the package's name and folder, so that it never imports what needs QGIS.

    python worker.py NAME FOLDER
"""

from __future__ import annotations

import importlib
import importlib.util
import os
import pickle
import sys
import traceback


def load_package(name: str, folder: str) -> None:
    """Make the package at ``folder`` importable as ``name``, whatever the folder is called."""
    location = os.path.join(folder, "__init__.py")
    spec = importlib.util.spec_from_file_location(name, location, submodule_search_locations=[folder])
    if spec is None or spec.loader is None:
        raise ImportError(f"There is no package at {folder}.")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)


def main() -> None:
    """Answer jobs, each the arguments of `fit_profile`, until standard input ends."""
    name, folder = sys.argv[1:3]
    # A script's own folder comes first on the path, where profile.py would hide the standard library's.
    own = os.path.dirname(os.path.abspath(__file__))
    sys.path[:] = [path for path in sys.path if os.path.abspath(path or os.curdir) != own]
    answers = os.fdopen(os.dup(sys.stdout.fileno()), "wb")
    # What anything prints must not come between the answers.
    os.dup2(sys.stderr.fileno(), sys.stdout.fileno())
    load_package(name, folder)
    fit_profile = importlib.import_module(f"{name}.plugin.core.fit").fit_profile
    expected = importlib.import_module(f"{name}.plugin.core.errors").DownwarpError
    while True:
        try:
            job = pickle.load(sys.stdin.buffer)
        except EOFError:
            return
        try:
            answer = ("done", fit_profile(*job))
        except expected as error:
            answer = ("failed", error.message)
        except Exception:
            answer = ("broken", traceback.format_exc())
        pickle.dump(answer, answers, protocol=pickle.HIGHEST_PROTOCOL)
        answers.flush()


if __name__ == "__main__":
    main()
