"""Runs the whole test suite in other releases of QGIS, each in a Debian of its own, and prints a table.

    python3 tests/tools/matrix.py [SUITE ...]

Each suite of Debian (bookworm for QGIS 3.22, trixie for 3.40, sid for 3.44; all but this machine's own if none is named)
is laid by debootstrap into a folder of DOWNWARP_CHROOTS, /var/cache/downwarp if that is not set, and kept for the next
run. The checkout's files are copied into it, and the tests run there without a network. Root, debootstrap and Debian's
packages are needed: where something lacks, a plain sentence says so, and that is no failure; a test that fails or hangs
is. What runs in a Debian has mounts and processes of its own, which end with this program, however that ends.
Standard library only.
"""

from __future__ import annotations

import fcntl
import os
import platform
import re
import shutil
import signal
import subprocess
import sys
import tarfile
import time
import xml.etree.ElementTree as ElementTree  # reads only what our own pytest wrote
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
SUITES = ("bookworm", "trixie", "sid")
LAYING_S, TESTING_S = 900, 2400
"""Time, s, after which laying a Debian, and testing in it, is given up."""
HANGING_S = 900
"""Time, s, without a test's end after which one is thought to hang."""
TELLING_S = 240
"""Time, s, between words on how far the tests are."""
READY = "downwarp-ready"
"""The file in a Debian that says that it was laid to the end."""
INSIDE = Path("root/downwarp")
"""Where the checkout lies in a Debian."""
LEFT_OUT = {".git", ".venv", "build", "__pycache__", ".hypothesis", ".mypy_cache", ".pytest_cache", ".ruff_cache"}
CARRIED = ("PIP_", "OPENBLAS_", "OMP_", "DOWNWARP_", "HYPOTHESIS_")
"""Beginnings of the names of variables that go along."""
CARRIED_WHOLE = {"CI", "HTTP_PROXY", "HTTPS_PROXY", "NO_PROXY", "FTP_PROXY", "ALL_PROXY", "SSL_CERT_FILE"}
CERTIFICATES = Path("etc/ssl/certs/ca-certificates.crt")
ISOLATED = ("setpriv", "--pdeathsig", "KILL", "unshare", "--mount", "--mount-proc", "--pid", "--fork", "--kill-child")
"""Runs a command with mounts and processes of its own; all end with it, and it ends with this program."""
TITLES = ("Debian", "QGIS", "Python", "numpy", "passed", "failed", "skipped", "seconds")
VERSIONS = (
    "import platform, numpy; from qgis.core import Qgis; "
    "print(Qgis.QGIS_VERSION.split('-')[0], platform.python_version(), numpy.__version__)"
)


class NotLaid(Exception):
    """A Debian could not be had here; the reason is one sentence."""


@dataclass(frozen=True)
class Row:
    """What became of one Debian."""

    suite: str
    versions: tuple[str, ...] = ("-", "-", "-")
    """Of QGIS, Python and numpy."""
    passed: int = 0
    failed: int = 0
    skipped: int = 0
    seconds: float = 0.0
    """Duration of the tests."""
    words: str = ""
    """Why it was not tested to the end, or the last words of tests that failed."""
    tested: bool = True

    def cells(self) -> tuple[str, ...]:
        """The row of the table."""
        if not self.tested:
            return self.suite, *self.versions, "-", "-", "-", "-"
        counts = (str(count) for count in (self.passed, self.failed, self.skipped))
        return self.suite, *self.versions, *counts, f"{self.seconds:.0f}"


def why_not() -> str:
    """Why this machine cannot do it; empty where it can."""
    if platform.system() != "Linux" or not Path("/etc/debian_version").is_file():
        return "this is no Debian"
    if os.geteuid() != 0:
        return "this needs root"
    for needed in ("chroot", "mount", "setpriv", "unshare"):
        if shutil.which(needed) is None:
            return f"the program {needed} is missing"
    if subprocess.run([*ISOLATED, "--net", "true"], capture_output=True, check=False).returncode:
        return "this machine lets nobody have mounts and processes of their own (unshare fails)"
    if shutil.which("debootstrap") is None and not _install_debootstrap():
        return "debootstrap is not installed and apt cannot get it"
    return ""


def _install_debootstrap() -> bool:
    quiet = {**os.environ, "DEBIAN_FRONTEND": "noninteractive"}
    end = time.monotonic() + LAYING_S
    for arguments in (["update"], ["install", "--no-install-recommends", "debootstrap"]):
        try:
            _laying(f"apt-get {arguments[0]}", ["apt-get", "-q", "-y", *arguments], quiet, end)
        except NotLaid:
            # A repository that cannot be reached need not matter.
            continue
    return shutil.which("debootstrap") is not None


def others() -> tuple[str, ...]:
    """The suites but this machine's own."""
    return tuple(suite for suite in SUITES if suite != platform.freedesktop_os_release().get("VERSION_CODENAME"))


def environment() -> dict[str, str]:
    """Variables for what runs inside: those about pip, proxies and certificates as they are here."""
    carried = {
        name: value for name, value in os.environ.items() if name.startswith(CARRIED) or name.upper() in CARRIED_WHOLE
    }
    for own in ("DOWNWARP_PYTHON", "DOWNWARP_CHROOTS"):
        carried.pop(own, None)
    carried.update(
        HOME="/root",
        LANG="C.UTF-8",
        TERM="dumb",
        OPENBLAS_NUM_THREADS="1",
        DEBIAN_FRONTEND="noninteractive",
        PATH="/usr/local/sbin:/usr/local/bin:/usr/sbin:/usr/bin:/sbin:/bin",
    )
    return carried


def mirror() -> list[str]:
    """The mirror that this machine's apt has Debian from, or nothing for debootstrap's own choice."""
    wanted = ["apt-get", "indextargets", "--format", "$(REPO_URI) $(LABEL) $(COMPONENT)"]
    found = subprocess.run(wanted, capture_output=True, text=True, check=False).stdout
    for line in found.splitlines():
        if line.endswith(" Debian main"):
            return [line.split(" ", 1)[0]]
    return []


def proxies() -> dict[str, str]:
    """apt's proxies as the variables that debootstrap's downloads follow."""
    found = subprocess.run(
        ["apt-config", "shell", "http_proxy", "Acquire::http::Proxy", "https_proxy", "Acquire::https::Proxy"],
        capture_output=True, text=True, check=False,
    ).stdout  # fmt: skip
    pairs = (line.partition("=") for line in found.splitlines())
    return {name: value.strip("'") for name, _, value in pairs if value.strip("'") not in ("", "DIRECT")}


def lay(suite: str, root: Path) -> None:
    """Lay a Debian with all that the tests need, and the checkout in it, or bring it up to date; raises NotLaid."""
    end = time.monotonic() + LAYING_S
    ready = root / READY
    if not ready.is_file():
        shutil.rmtree(root, ignore_errors=True)
        laying = [*ISOLATED, "debootstrap", "--variant=minbase", suite, str(root), *mirror()]
        _laying("debootstrap", laying, {**proxies(), **os.environ}, end)
    carry_network(root)
    copy_checkout(root)
    install = "apt-get -q -y -o Acquire::Retries=3"
    first = () if ready.is_file() else (
        f"{install} update",
        f"{install} install --no-install-recommends ca-certificates make",
        "update-ca-certificates",
    )  # fmt: skip
    # The packages and tools that are wanted may have changed since the Debian was laid.
    for command in (*first, f"cd /{INSIDE} && sh .ci/setup test", "apt-get clean"):
        _laying(command, entered(root, command), environment(), end)
    ready.touch()


def _laying(what: str, command: list[str], variables: dict[str, str], end: float) -> None:
    try:
        done = subprocess.run(
            command,
            env=variables,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            errors="replace",
            timeout=max(end - time.monotonic(), 1.0),
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise NotLaid(f"{what} was not done within {LAYING_S} s of the beginning") from None
    if done.returncode:
        # debootstrap tells of its steps by lines with I.
        last = "\n".join([line for line in done.stdout.splitlines() if line and not line.startswith("I: ")][-5:])
        raise NotLaid(f"{what} failed: {last or 'it says nothing'}")


def carry_network(root: Path) -> None:
    """Let apt and pip inside reach what they reach here: names, proxies, certificates, pip's settings."""
    for name in ("etc/resolv.conf", "etc/hosts", "etc/pip.conf"):
        _copy(Path("/") / name, root / name)
    home = Path.home()
    for name in (".config/pip/pip.conf", ".pip/pip.conf"):
        _copy(home / name, root / "root" / name)
    settings = subprocess.run(["apt-config", "dump", "Acquire"], capture_output=True, text=True, check=False).stdout
    wanted = [line for line in settings.splitlines() if "proxy" in line.lower() or line.startswith("Acquire::https::")]
    # A mirror may lag behind; what it serves is signed all the same.
    wanted.append('Acquire::Check-Valid-Until "false";')
    (root / "etc/apt/apt.conf.d/99here").write_text("\n".join([*wanted, ""]), encoding="utf-8")
    for certificate in Path("/usr/local/share/ca-certificates").glob("*.crt"):
        _copy(certificate, root / str(certificate)[1:])
    if not (root / CERTIFICATES).exists():
        _copy(Path("/") / CERTIFICATES, root / CERTIFICATES)
    for value in environment().values():
        # A file that a variable names (PIP_CERT, say) has to be there inside, too.
        if value.startswith("/") and Path(value).is_file() and not (root / value[1:]).exists():
            _copy(Path(value), root / value[1:])


def _copy(source: Path, target: Path) -> None:
    if source.is_file():
        target.parent.mkdir(parents=True, exist_ok=True)
        target.unlink(missing_ok=True)
        shutil.copyfile(source, target)


def copy_checkout(root: Path) -> None:
    """Copy the checkout's files in; the tools that an earlier run laid stay."""
    target = root / INSIDE
    target.mkdir(parents=True, exist_ok=True)
    for old in target.iterdir():
        if old.name != ".venv":
            shutil.rmtree(old) if old.is_dir() and not old.is_symlink() else old.unlink()

    def wanted(member: tarfile.TarInfo) -> tarfile.TarInfo | None:
        return None if Path(member.name).name in LEFT_OUT else member

    packed = root / "root" / "downwarp.tar"
    with tarfile.open(packed, "w") as archive:
        archive.add(CHECKOUT, ".", filter=wanted)
    with tarfile.open(packed) as archive:
        # Our own files, packed a moment ago.
        archive.extractall(target)
    packed.unlink()


def entered(root: Path, command: str, network: bool = True) -> list[str]:
    """The command that runs a shell ``command`` inside."""
    # The shell stays, as the first process: it takes in orphans.
    prepared = (
        'mount --bind /proc "$0/proc" && mount --rbind /dev "$0/dev" && mount -t tmpfs tmpfs "$0/tmp" '
        '&& { ip link set lo up 2>/dev/null || true; } && chroot "$0" sh -c "$1"; exit $?'
    )
    return [*ISOLATED, *([] if network else ["--net"]), "sh", "-c", prepared, str(root), command]


@contextmanager
def alone(root: Path) -> Iterator[None]:
    """Keep other runs off a Debian; raises NotLaid where one is at work there."""
    root.parent.mkdir(parents=True, exist_ok=True)
    with root.with_suffix(".lock").open("w") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise NotLaid(f"another run is at work in {root}") from None
        yield


def tested(suite: str, folder: Path) -> Row:
    """Lay a Debian and run the tests in it."""
    root = folder / suite
    try:
        with alone(root):
            print(f"{suite}: laying it in {root}", flush=True)
            lay(suite, root)
            return _tested(suite, root)
    except (NotLaid, OSError) as error:
        return Row(suite, words=f"{suite} is not tested here: {error}", tested=False)


def _tested(suite: str, root: Path) -> Row:
    asked = subprocess.run(
        entered(root, f'/usr/bin/python3 -c "{VERSIONS}"'),
        env=environment(), capture_output=True, text=True, check=False,
    )  # fmt: skip
    versions = tuple(asked.stdout.split()) or ("-", "-", "-")
    print(f"{suite}: testing with QGIS {versions[0]}", flush=True)
    log = root.with_suffix(".log")
    start = time.monotonic()
    code = _run_tests(suite, root, log)
    seconds = time.monotonic() - start
    said = log.read_text(encoding="utf-8", errors="replace")
    if code is None:
        passed, failed, skipped = (
            len(re.findall(rf" (?:{words}) ", said)) for words in ("PASSED", "FAILED|ERROR", "SKIPPED")
        )
        last = said.rstrip().rpartition("\n")[2]
        if time.time() - log.stat().st_mtime > HANGING_S:
            return Row(suite, versions, passed, failed + 1, skipped, seconds, f"{suite}: this test hangs: {last}")
        words = f"{suite} is not tested to the end: after {TESTING_S} s the tests had come to {last}"
        return Row(suite, versions, passed, failed, skipped, seconds, words)
    try:
        passed, failed, skipped = counts(root / INSIDE / "build/tests.xml")
    except (OSError, ElementTree.ParseError):
        passed, failed, skipped = 0, 1, 0
    if not failed and not code:
        return Row(suite, versions, passed, failed, skipped, seconds)
    words = "\n".join([f"{suite}: the tests ended with code {code}:", *said.splitlines()[-150:]])
    return Row(suite, versions, passed, max(failed, 1), skipped, seconds, words)


def _run_tests(suite: str, root: Path, log: Path) -> int | None:
    """Run pytest to its end and return its code; None where it was stopped, because it took too long or hung."""
    command = f"cd /{INSIDE} && .venv/bin/python -m pytest -v --tb=short --junit-xml=build/tests.xml"
    variables = {**environment(), "QT_QPA_PLATFORM": "offscreen"}
    end = time.monotonic() + TESTING_S
    with log.open("w", encoding="utf-8") as stream, subprocess.Popen(
        entered(root, command, network=False), env=variables, stdin=subprocess.DEVNULL, stdout=stream, stderr=stream
    ) as process:  # fmt: skip
        while True:
            try:
                return process.wait(min(TELLING_S, max(end - time.monotonic(), 0.0)))
            except subprocess.TimeoutExpired:
                if time.monotonic() >= end or time.time() - log.stat().st_mtime > HANGING_S:
                    process.kill()
                    return None
                done = re.findall(r"\[ *(\d+%)\]", log.read_text(encoding="utf-8", errors="replace"))
                print(f"{suite}: {done[-1] if done else 'none'} of the tests are done", flush=True)


def counts(path: Path) -> tuple[int, int, int]:
    """Tests passed, failed and skipped, from the file that pytest wrote."""
    suites = list(ElementTree.parse(path).getroot().iter("testsuite"))
    every, errors, failures, skipped = (
        sum(int(suite.get(name, 0)) for suite in suites) for name in ("tests", "errors", "failures", "skipped")
    )
    return every - errors - failures - skipped, errors + failures, skipped


def here() -> list[Row]:
    """This machine's own QGIS, from the tests that `make unit` ran last; nothing where it has not."""
    path = CHECKOUT / "build" / "tests.xml"
    python = os.environ.get("DOWNWARP_PYTHON", "/usr/bin/python3")
    if not path.is_file():
        return []
    asked = subprocess.run([python, "-c", VERSIONS], capture_output=True, text=True, check=False)
    seconds = sum(float(suite.get("time", 0)) for suite in ElementTree.parse(path).getroot().iter("testsuite"))
    return [Row("this one", tuple(asked.stdout.split()) or ("-", "-", "-"), *counts(path), seconds)]


def show(rows: Sequence[Row]) -> None:
    """Print the table, and the totals as its last line."""
    table = [TITLES, *(row.cells() for row in rows)]
    widths = [max(len(line[column]) for line in table) for column in range(len(TITLES))]
    for line in table:
        print("  ".join(cell.ljust(width) for cell, width in zip(line, widths)).rstrip())
    passed, failed, skipped = (sum(getattr(row, name) for row in rows) for name in ("passed", "failed", "skipped"))
    print(f"\n{passed} passed, {failed} failed, {skipped} skipped in all")


def main(suites: tuple[str, ...]) -> int:
    """Test in each; the number of those with tests that failed."""
    rows: list[Row] = []
    reason = why_not()
    if reason:
        print(f"Other releases of QGIS are not tested here: {reason}.")
    else:
        folder = Path(os.environ.get("DOWNWARP_CHROOTS", "/var/cache/downwarp")).resolve()
        chosen = suites or others()
        with ThreadPoolExecutor(len(chosen)) as pool:
            rows += pool.map(lambda suite: tested(suite, folder), chosen)
    for row in rows:
        if row.words:
            print(f"\n{row.words}")
    every = [*here(), *rows]
    if every:
        print()
        show(every)
    return sum(row.failed > 0 for row in rows)


if __name__ == "__main__":
    # Interrupted, it ends at once, and with it what it runs.
    signal.signal(signal.SIGINT, signal.SIG_DFL)
    sys.exit(min(main(tuple(sys.argv[1:])), 1))
