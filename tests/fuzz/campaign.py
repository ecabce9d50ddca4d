"""Runs the cases of the fuzz suite, in processes of their own, and says what became of them.

    python campaign.py [--cases N] [--seed S] [--first F] [--processes P] [--log FILE]

Each case is one run of an algorithm through `processing.run`. A process that dies or takes too long over a case costs
that case, which is told as a crash or a hang, and a new process takes up the next. The end code is 0 where every run
ended in a result that passes the checks of `sanity.py` or in a sentence.
"""

from __future__ import annotations

import argparse
import json
import os
import queue
import subprocess
import sys
import tempfile
import threading
import time
import traceback
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

SEED = 20
LIMIT_S = 60.0
"""Time, s, after which a case counts as a hang."""
START_S = 120.0
"""Time, s, that QGIS may take to start."""
BATCH = 250
"""Cases in a process; QGIS keeps some memory after each."""
ROOT = Path(__file__).resolve().parents[2]


@dataclass
class Summary:
    """What became of the cases."""

    outcomes: Counter = field(default_factory=Counter)
    faults: list[dict] = field(default_factory=list)
    slowest: float = 0.0
    """Time, s, of the slowest case."""
    seconds: float = 0.0

    def words(self) -> str:
        """In words."""
        counts = ", ".join(f"{count} {outcome}" for outcome, count in sorted(self.outcomes.items()))
        total = sum(self.outcomes.values())
        lines = [f"{total} cases in {self.seconds:.0f} s, the slowest {self.slowest:.1f} s: {counts}"]
        for each in self.faults:
            lines.append(f"case {each['case']} ({each.get('algorithm', '?')}): {'; '.join(each['faults'])}")
            lines.append(f"    {json.dumps(each.get('parameters', {}), ensure_ascii=False)[:1500]}")
        return "\n".join(lines)


def campaign(cases: int, seed: int = SEED, first: int = 0, processes: int = 1, log: Path | None = None) -> Summary:
    """Run cases ``first`` to ``first + cases``."""
    summary = Summary()
    start = time.monotonic()
    batches: queue.SimpleQueue[tuple[int, int]] = queue.SimpleQueue()
    size = max(1, min(BATCH, -(-cases // processes)))
    for begin in range(first, first + cases, size):
        batches.put((begin, min(begin + size, first + cases)))
    lock = threading.Lock()

    def record(entry: dict) -> None:
        with lock:
            summary.outcomes[entry["outcome"]] += 1
            summary.slowest = max(summary.slowest, entry.get("seconds", 0.0))
            if entry["outcome"] not in ("result", "refused"):
                summary.faults.append(entry)
            if log is not None:
                with log.open("a", encoding="utf-8") as stream:
                    stream.write(json.dumps(entry, ensure_ascii=False) + "\n")

    def work() -> None:
        while True:
            try:
                begin, end = batches.get_nowait()
            except queue.Empty:
                return
            while begin < end:
                begin = _batch(seed, begin, end, record)

    threads = [threading.Thread(target=work) for _ in range(processes)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    summary.seconds = time.monotonic() - start
    return summary


def _batch(seed: int, begin: int, end: int, record) -> int:
    """Run cases in one process until it is done, dies or hangs; the number of the next case."""
    with tempfile.TemporaryDirectory(prefix="downwarp-fuzz-") as folder:
        command = [sys.executable, __file__, "--child", folder, "--seed", str(seed), "--first", str(begin)]
        environment = {
            **os.environ,
            "QT_QPA_PLATFORM": "offscreen",
            "OPENBLAS_NUM_THREADS": "1",
            "XDG_RUNTIME_DIR": folder,
            "QGIS_CUSTOM_CONFIG_PATH": folder,
        }
        errors = Path(folder) / "errors.txt"
        with errors.open("w") as error_stream:
            process = subprocess.Popen(
                [*command, "--cases", str(end - begin)],
                stdout=subprocess.PIPE,
                stderr=error_stream,
                stdin=subprocess.DEVNULL,
                text=True,
                env=environment,
            )
        lines: queue.SimpleQueue[str | None] = queue.SimpleQueue()

        def read() -> None:
            for line in process.stdout or ():
                lines.put(line)
            lines.put(None)

        reader = threading.Thread(target=read, daemon=True)
        reader.start()
        current, patience = begin, START_S
        told: dict = {}
        while current < end:
            try:
                line = lines.get(timeout=patience)
            except queue.Empty:
                record({**told, "case": current, "outcome": "hang", "faults": [f"no answer within {patience:g} s"]})
                current += 1
                break
            if line is None:
                last = errors.read_text(errors="replace")[-1500:]
                record({**told, "case": current, "outcome": "crash", "faults": [f"end code {process.wait()}: {last}"]})
                current += 1
                break
            if not line.startswith("{"):
                continue
            entry = json.loads(line)
            patience = LIMIT_S
            if "outcome" not in entry:
                told = entry
                continue
            record(entry)
            told = {}
            current = entry["case"] + 1
        process.kill()
        process.wait()
        reader.join()
        if process.stdout is not None:
            process.stdout.close()
        return current


def child(folder: Path, seed: int, first: int, count: int) -> None:
    """Run cases one after another and print what became of each, a line of JSON before and after."""
    sys.path[:0] = [str(ROOT / "tests")]
    import conftest  # noqa: F401  loads the checkout as a package
    from qgis.core import (
        QgsApplication,
        QgsProcessingContext,
        QgsProcessingException,
        QgsProcessingFeedback,
        QgsProject,
    )

    application = QgsApplication([], False)
    application.initQgis()
    sys.path.append(QgsApplication.pkgDataPath() + "/python/plugins")
    import processing
    from cases import Maker
    from downwarp_checkout.plugin.bridge.algorithm import DownwarpAlgorithm
    from downwarp_checkout.plugin.provider import DownwarpProvider
    from hostile import World
    from processing.core.Processing import Processing
    from sanity import refusal_faults, result_faults

    Processing.initialize()
    provider = DownwarpProvider()
    QgsApplication.processingRegistry().addProvider(provider)
    unexpected: list[str] = []
    for name in ("checkParameterValues", "prepareAlgorithm", "processAlgorithm"):
        setattr(DownwarpAlgorithm, name, _watched(getattr(DownwarpAlgorithm, name), QgsProcessingException, unexpected))
    sys.unraisablehook = lambda args: unexpected.append(f"unraisable: {args.exc_value!r}")
    threading.excepthook = lambda args: unexpected.append(f"in a thread: {args.exc_value!r}")

    class Feedback(QgsProcessingFeedback):
        """Keeps the errors that it is told."""

        def __init__(self) -> None:
            super().__init__(False)
            self.errors: list[str] = []

        def reportError(self, error: str, fatal: bool = False) -> None:
            self.errors.append(error)

    world = World(folder / "world")
    results = processing.run(
        "downwarp:bendtransects",
        {
            "TRANSECTS": world.vector("lines", "good"),
            "DEM": world.raster("good"),
            "STEP_KM": 15,
            "SETTING": 1,
            "PLATE": 1,
            "END_SHEAR": 1e12,
            "PROFILES": "memory:",
            "STATIONS": "memory:",
        },
        feedback=Feedback(),
    )
    world.made.update(bent=results["STATIONS"], profiles=results["PROFILES"])
    maker = Maker(seed, world, folder / "out é '\"")
    for number in range(first, first + count):
        case = maker.case(number)
        told = {"case": number, "algorithm": case.algorithm, "parameters": case.told}
        print(json.dumps(told), flush=True)
        context, feedback = QgsProcessingContext(), Feedback()
        context.setProject(QgsProject.instance())
        unexpected.clear()
        start = time.monotonic()
        faults: list[str] = []
        outcome = "result"
        words = ""
        try:
            results = processing.run(
                f"downwarp:{case.algorithm}", dict(case.parameters), context=context, feedback=feedback
            )
        except QgsProcessingException as error:
            outcome, words = "refused", "\n".join(dict.fromkeys([str(error), *feedback.errors]))
            faults += refusal_faults(words)
        except Exception:
            # Processing's own Python stumbles over values that are no parameters; ours must not.
            trace = traceback.format_exc()
            outcome, words = "refused", trace.strip().splitlines()[-1]
            if "downwarp_checkout" in trace or str(ROOT) in trace.replace(__file__, ""):
                faults.append(trace)
        else:
            faults += result_faults(results, context, case.parameters)
        faults += unexpected
        seconds = round(time.monotonic() - start, 3)
        if faults:
            outcome = "fault"
        became = {"outcome": outcome, "faults": faults, "words": words[:600], "seconds": seconds}
        print(json.dumps({**told, **became}), flush=True)
    # QGIS crashes in an orderly end while layers are about.
    os._exit(0)


def _watched(method, allowed: type[BaseException], unexpected: list[str]):
    """The method, with exceptions noted that Python raised and no sentence of ours replaced."""

    def watched(*arguments):
        try:
            return method(*arguments)
        except allowed:
            raise
        except Exception:
            unexpected.append(traceback.format_exc())
            raise

    return watched


def main() -> int:
    """Read the command line and run."""
    parser = argparse.ArgumentParser(description="Run cases of the fuzz suite.")
    parser.add_argument("--cases", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--processes", type=int, default=max(1, os.cpu_count() or 1))
    parser.add_argument("--log", type=Path)
    parser.add_argument("--child", type=Path, help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.child:
        child(given.child, given.seed, given.first, given.cases)
    if given.log is not None:
        given.log.parent.mkdir(parents=True, exist_ok=True)
        given.log.unlink(missing_ok=True)
    summary = campaign(given.cases, given.seed, given.first, given.processes, given.log)
    print(summary.words())
    return int(bool(summary.faults))


if __name__ == "__main__":
    sys.exit(main())
