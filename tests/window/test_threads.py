"""Tasks of QGIS that use pyproj one after another, in a process of their own: a mistake there crashes it."""

import importlib.util
import os
import subprocess
import sys
from pathlib import Path

import pytest

TESTS = Path(__file__).resolve().parents[1]

PROGRAM = """
import os, sys, time
import conftest
from qgis.core import QgsApplication
application = QgsApplication([], False)
application.initQgis()
from pyproj import Transformer
from downwarp_checkout.plugin.bridge.algorithm import DownwarpAlgorithm
from downwarp_checkout.plugin.panel.task import Work
from qgis.core import QgsProcessingAlgRunnerTask, QgsProcessingContext, QgsProcessingFeedback

def project(progress):
    return Transformer.from_crs("EPSG:4326", "EPSG:32727", always_xy=True).transform(-20.0, -40.0)[0]

class Projects(DownwarpAlgorithm):
    def name(self): return "projects"
    def displayName(self): return "projects"
    def initAlgorithm(self, configuration=None): pass
    def createInstance(self): return Projects()
    def checkParameterValues(self, parameters, context): return True, ""
    def prepareAlgorithm(self, parameters, context, feedback): return True
    def carry_out(self, parameters, context, feedback): return {"EAST": project(None)}

found, ended, kept = [], [], []
def start(turn):
    if turn % 2:
        task = Work("work", project, found.append, found.append, lambda: ended.append(1))
    else:
        algorithm, context, feedback = Projects(), QgsProcessingContext(), QgsProcessingFeedback(False)
        task = QgsProcessingAlgRunnerTask(algorithm, {}, context, feedback)
        task.executed.connect(lambda done, results: (found.append(results["EAST"]), ended.append(1)))
        kept.extend((algorithm, context, feedback))
    kept.append(task)
    QgsApplication.taskManager().addTask(task)

for turn in range(24):
    start(turn)
    limit = time.monotonic() + 10
    while len(ended) <= turn and time.monotonic() < limit:
        application.processEvents()
        time.sleep(0.002)
print(len(found), len({round(east, 6) for east in found}))
sys.stdout.flush()
os._exit(0)
"""


@pytest.mark.skipif(importlib.util.find_spec("qgis") is None, reason="tasks need QGIS")
def test_tasks_in_a_row_may_use_pyproj():
    """24 tasks, by turns the panel's and an algorithm's, project one place and agree on it."""
    environment = {**os.environ, "QT_QPA_PLATFORM": "offscreen", "PYTHONPATH": str(TESTS)}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM], env=environment, capture_output=True, text=True, check=False, timeout=120
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == ["24", "1"]
