"""What the tool that tests in other releases of QGIS makes of tests that pass, fail, hang or cannot be run."""

import fcntl
import subprocess
import sys

import matrix
import pytest

VERDICTS = """
def test_one(): pass
def test_two(): assert {good}
def test_three():
    import pytest
    pytest.skip("not here")
"""
ENDLESS = """#!/bin/sh
echo "test_it.py::test_quick PASSED [ 50%]"
printf "test_it.py::test_slow "
exec sleep 600
"""


@pytest.fixture
def debian(tmp_path, monkeypatch):
    """Stands in for a Debian: what would run in one runs here, in a folder that holds the tests."""
    inside = tmp_path / "imagined" / matrix.INSIDE
    (inside / ".venv/bin").mkdir(parents=True)
    (inside / "pytest.ini").write_text("[pytest]\n", encoding="utf-8")
    # A link would hide from Python that it runs in a virtual environment.
    say(inside / ".venv/bin/python", f'#!/bin/sh\nexec {sys.executable} "$@"\n')

    def entered(root, command, network=True):
        return ["sh", "-c", command.replace(f"cd /{matrix.INSIDE} && ", f"cd {inside} && exec ")]

    monkeypatch.setattr(matrix, "entered", entered)
    monkeypatch.setattr(matrix, "lay", lambda suite, root: None)
    return inside


def say(program, words):
    program.write_text(words, encoding="utf-8")
    program.chmod(0o755)


@pytest.mark.parametrize(("good", "expected"), [(True, (2, 0, 1)), (False, (1, 1, 1))])
def test_verdicts_are_counted(debian, tmp_path, good, expected):
    """Passed, failed and skipped as pytest has them; which test failed is told."""
    (debian / "test_it.py").write_text(VERDICTS.format(good=good), encoding="utf-8")
    row = matrix.tested("imagined", tmp_path)
    assert (row.passed, row.failed, row.skipped) == expected
    assert ("FAILED test_it.py::test_two" in row.words) == (not good)


def test_tests_that_cannot_be_collected_are_a_failure(debian, tmp_path):
    """pytest ends with an error and without a test: that is not a row of noughts that looks well."""
    (debian / "test_it.py").write_text("import nothing_of_that_name\n", encoding="utf-8")
    row = matrix.tested("imagined", tmp_path)
    assert row.failed == 1
    assert "nothing_of_that_name" in row.words


@pytest.mark.parametrize(
    ("limit", "failed", "words"), [("TESTING_S", 0, "not tested to the end"), ("HANGING_S", 1, "hangs")]
)
def test_too_slow_a_machine_is_told_and_a_test_that_hangs_fails(debian, tmp_path, monkeypatch, limit, failed, words):
    """Both are stopped, and the test that was under way is named; only one that does not end by itself is a failure."""
    say(debian / ".venv/bin/python", ENDLESS)
    monkeypatch.setattr(matrix, limit, 2)
    monkeypatch.setattr(matrix, "TELLING_S", 0.5)
    row = matrix.tested("imagined", tmp_path)
    assert (row.passed, row.failed, row.skipped) == (1, failed, 0)
    assert words in row.words
    assert "test_slow" in row.words


def test_a_debian_that_cannot_be_laid_is_no_failure(tmp_path, monkeypatch, capsys):
    """One sentence says why, the table has no numbers for it, and the end code is that of success."""

    def lay(suite, root):
        raise matrix.NotLaid("debootstrap failed: no such mirror")

    monkeypatch.setattr(matrix, "lay", lay)
    monkeypatch.setattr(matrix, "why_not", lambda: "")
    monkeypatch.setattr(matrix, "here", list)
    monkeypatch.setenv("DOWNWARP_CHROOTS", str(tmp_path))
    assert matrix.main(("imagined",)) == 0
    said = capsys.readouterr().out
    assert "imagined is not tested here: debootstrap failed: no such mirror" in said
    assert said.splitlines()[-1] == "0 passed, 0 failed, 0 skipped in all"


def test_two_runs_do_not_share_a_debian(debian, tmp_path):
    """While one holds it, the other says so and leaves it alone."""
    with (tmp_path / "imagined.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        row = matrix.tested("imagined", tmp_path)
    assert not row.tested
    assert "another run is at work" in row.words


def test_what_runs_in_a_debian_ends_with_its_parent():
    """Killed without a chance to clean up, the tool takes all processes along that it started, grandchildren, too.

    They share an output, which comes to its end when all are gone; one that is left would write a word into it first.
    """
    try:
        able = subprocess.run([*matrix.ISOLATED, "true"], capture_output=True, check=False).returncode == 0
    except FileNotFoundError:
        able = False
    if not able:
        pytest.skip("this machine lets nobody have mounts and processes of their own")
    command = [*matrix.ISOLATED, "sh", "-c", "(sleep 30; echo left) & echo begun; sleep 30; echo left"]
    parent = subprocess.Popen(
        [sys.executable, "-c", f"import subprocess; subprocess.run({command!r})"], stdout=subprocess.PIPE, text=True
    )
    with parent.stdout as said:
        assert said.readline() == "begun\n"
        parent.kill()
        parent.wait()
        assert said.read() == ""
