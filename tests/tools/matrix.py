"""Runs the whole test suite in other releases of QGIS, each in a Debian of its own, and prints a table.

    python3 tests/tools/matrix.py [SUITE ...]

Each suite of Debian (trixie for QGIS 3.40, sid for 3.44 if none is named) is laid by debootstrap into a folder of
DOWNWARP_CHROOTS, /var/cache/downwarp if that is not set, and kept for the next run. The checkout's files are copied
into it, and the tests run there without a network. Root, debootstrap and Debian's packages are needed: where something
lacks, a plain sentence says so, and that is no failure; a test that fails is. Standard library only.
"""

from __future__ import annotations

import os
import platform
import shutil
import subprocess
import sys
import tarfile
import time
import xml.etree.ElementTree as ElementTree  # reads only what our own pytest wrote
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
SUITES = ("trixie", "sid")
LAYING_S, TESTING_S = 900, 2400
"""Time, s, after which laying a Debian, and testing in it, is given up."""
READY = "downwarp-ready"
"""The file in a Debian that says that it was laid to the end."""
INSIDE = Path("root/downwarp")
"""Where the checkout lies in a Debian."""
LEFT_OUT = {".git", ".venv", "build", "__pycache__", ".hypothesis", ".mypy_cache", ".pytest_cache", ".ruff_cache"}
CARRIED = ("PIP_", "OPENBLAS_", "OMP_", "DOWNWARP_", "HYPOTHESIS_")
"""Beginnings of the names of variables that go along."""
CARRIED_WHOLE = {"CI", "HTTP_PROXY", "HTTPS_PROXY", "NO_PROXY", "FTP_PROXY", "ALL_PROXY", "SSL_CERT_FILE"}
CERTIFICATES = Path("etc/ssl/certs/ca-certificates.crt")
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
    """Why it was not tested, or the last words of tests that failed."""
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
    if shutil.which("debootstrap") is None and not _install_debootstrap():
        return "debootstrap is not installed and apt cannot get it"
    for needed in ("chroot", "unshare", "mount"):
        if shutil.which(needed) is None:
            return f"the program {needed} is missing"
    if subprocess.run(["unshare", "--mount", "--net", "true"], capture_output=True, check=False).returncode:
        return "this machine lets nobody make mounts of their own (unshare fails)"
    return ""


def _install_debootstrap() -> bool:
    quiet = {**os.environ, "DEBIAN_FRONTEND": "noninteractive"}
    for arguments in (["update"], ["install", "--no-install-recommends", "debootstrap"]):
        command = ["apt-get", "-q", "-y", "-o", "DPkg::Lock::Timeout=300", *arguments]
        subprocess.run(command, env=quiet, stdin=subprocess.DEVNULL, capture_output=True, check=False)
    return shutil.which("debootstrap") is not None


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
    """Lay a Debian with all that the tests need, unless it is there already; raises NotLaid."""
    if (root / READY).is_file():
        carry_network(root)
        return
    shutil.rmtree(root, ignore_errors=True)
    root.parent.mkdir(parents=True, exist_ok=True)
    _laying(["debootstrap", "--variant=minbase", suite, str(root), *mirror()], {**proxies(), **os.environ})
    carry_network(root)
    copy_checkout(root)
    install = "apt-get -q -y -o Acquire::Retries=3"
    commands = (
        f"{install} update",
        f"{install} install --no-install-recommends ca-certificates make",
        "update-ca-certificates",
        f"cd /{INSIDE} && sh .ci/setup test",
        "apt-get clean",
    )
    for command in commands:
        _laying(entered(root, command), environment())
    (root / READY).touch()


def _laying(command: list[str], variables: dict[str, str]) -> None:
    try:
        done = subprocess.run(
            command,
            env=variables,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            errors="replace",
            timeout=LAYING_S,
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise NotLaid(f"{command[0]} took more than {LAYING_S} s") from None
    if done.returncode:
        last = "\n".join(done.stdout.strip().splitlines()[-5:])
        raise NotLaid(f"{' '.join(command[-3:])} failed: {last or 'it says nothing'}")


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
    """The command that runs a shell ``command`` inside; its mounts are its own and go with it."""
    isolated = ["unshare", "--mount", *([] if network else ["--net"])]
    prepared = (
        'mount --bind /proc "$0/proc" && mount --rbind /dev "$0/dev" && mount -t tmpfs tmpfs "$0/tmp" '
        '&& { ip link set lo up 2>/dev/null || true; } && exec chroot "$0" sh -c "$1"'
    )
    return [*isolated, "sh", "-c", prepared, str(root), command]


def tested(suite: str, folder: Path) -> Row:
    """Lay a Debian and run the tests in it."""
    root = folder / suite
    print(f"{suite}: laying it in {root}", flush=True)
    try:
        lay(suite, root)
        copy_checkout(root)
        # The pinned tools may have changed since the Debian was laid.
        _laying(entered(root, f"cd /{INSIDE} && sh .ci/setup test"), environment())
    except (NotLaid, OSError) as error:
        return Row(suite, words=f"not laid: {error}", tested=False)
    asked = subprocess.run(
        entered(root, f'/usr/bin/python3 -c "{VERSIONS}"'),
        env=environment(), capture_output=True, text=True, check=False,
    )  # fmt: skip
    versions = tuple(asked.stdout.split()) or ("-", "-", "-")
    print(f"{suite}: testing with QGIS {versions[0]}", flush=True)
    log = folder / f"{suite}.log"
    start = time.monotonic()
    command = f"cd /{INSIDE} && .venv/bin/python -m pytest -q --junit-xml=build/tests.xml"
    variables = {**environment(), "QT_QPA_PLATFORM": "offscreen"}
    with log.open("w", encoding="utf-8") as stream:
        try:
            code = subprocess.run(
                entered(root, command, network=False),
                env=variables,
                stdin=subprocess.DEVNULL,
                stdout=stream,
                stderr=subprocess.STDOUT,
                timeout=TESTING_S,
                check=False,
            ).returncode
        except subprocess.TimeoutExpired:
            return Row(suite, versions, failed=1, seconds=TESTING_S, words=f"the tests took more than {TESTING_S} s")
    seconds = time.monotonic() - start
    said = "\n".join(log.read_text(encoding="utf-8", errors="replace").splitlines()[-40:])
    try:
        passed, failed, skipped = counts(root / INSIDE / "build/tests.xml")
    except (OSError, ElementTree.ParseError):
        return Row(suite, versions, failed=1, seconds=seconds, words=f"pytest did not come to its end:\n{said}")
    failed = max(failed, int(code != 0))
    return Row(suite, versions, passed, failed, skipped, seconds, said if failed else "")


def counts(path: Path) -> tuple[int, int, int]:
    """Tests passed, failed and skipped, from the file that pytest wrote."""
    suites = list(ElementTree.parse(path).getroot().iter("testsuite"))
    every, errors, failures, skipped = (
        sum(int(suite.get(name, 0)) for suite in suites) for name in ("tests", "errors", "failures", "skipped")
    )
    return every - errors - failures - skipped, errors + failures, skipped


def here() -> Row | None:
    """This machine's own QGIS, from the tests that `make unit` ran last."""
    path = CHECKOUT / "build" / "tests.xml"
    python = os.environ.get("DOWNWARP_PYTHON", "/usr/bin/python3")
    asked = subprocess.run([python, "-c", VERSIONS], capture_output=True, text=True, check=False)
    if not path.is_file() or asked.returncode:
        return None
    seconds = sum(float(suite.get("time", 0)) for suite in ElementTree.parse(path).getroot().iter("testsuite"))
    return Row("this one", tuple(asked.stdout.split()), *counts(path), seconds)


def show(rows: Iterable[Row]) -> None:
    """Print the table."""
    table = [TITLES, *(row.cells() for row in rows)]
    widths = [max(len(line[column]) for line in table) for column in range(len(TITLES))]
    for line in table:
        print("  ".join(cell.ljust(width) for cell, width in zip(line, widths)).rstrip())


def main(suites: tuple[str, ...]) -> int:
    """Test in each; the number of those with tests that failed."""
    reason = why_not()
    if reason:
        print(f"Other releases of QGIS are not tested here: {reason}.")
        return 0
    folder = Path(os.environ.get("DOWNWARP_CHROOTS", "/var/cache/downwarp")).resolve()
    with ThreadPoolExecutor(min(len(suites), max(os.cpu_count() or 1, 1))) as pool:
        rows = list(pool.map(lambda suite: tested(suite, folder), suites))
    for row in rows:
        if row.words:
            print(f"\n{row.suite}: {row.words}")
    print()
    own = here()
    show([*([own] if own else []), *rows])
    return sum(row.tested and row.failed > 0 for row in rows)


if __name__ == "__main__":
    sys.exit(min(main(tuple(sys.argv[1:]) or SUITES), 1))
