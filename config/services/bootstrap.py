"""Make the Python environment that everything else runs in: `python3 config/services/bootstrap.py REQUIREMENTS`.

The first thing `make` runs, so it needs Python 3.8 or newer and nothing else, imports nothing of this project, and
does nothing when there is nothing to do. Steps: find a Python that the locked packages are made for (or have one
downloaded), get the installer uv into `.tools/`, create `.venv/`, install the locked packages by their hashes,
compile the numerical kernels. Whatever goes wrong is told in one sentence; the tools' own words go to `.tools/log`.
"""

from __future__ import annotations

import errno
import glob
import hashlib
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

PROJECT = Path(__file__).resolve().parents[2]
TOOLS = PROJECT / ".tools"
LOG = TOOLS / "log"
ENVIRONMENT = PROJECT / ".venv"
ENVIRONMENT_PYTHON = ENVIRONMENT / "bin" / "python"
OLDEST = (3, 12)
INSTALL_MEGABYTES = 1500

# What the tools say when it is not their fault, and what a person can do about it. First match wins.
KNOWN_FAILURES = (
    (
        r"No space left on device|Disk quota exceeded",
        f"The disk holding {PROJECT} is full: free about {INSTALL_MEGABYTES} MB and run the command again.",
    ),
    # Before the next one: pip says that it found no distribution when it found no index.
    (
        r"error sending request|client error|dns error|tcp connect|timed out|Connection (?:refused|reset)|"
        r"invalid peer certificate|CERTIFICATE_VERIFY_FAILED|Temporary failure in name resolution|"
        r"NewConnectionError|ProxyError|Max retries exceeded|Failed to fetch",
        "The package index could not be reached: check this machine's network connection and proxy settings and run"
        " the command again.",
    ),
    (
        r"([\w.-]+)(?:==\S+)? has no (?:usable )?wheels|No matching distribution found for ([\w.-]+)",
        "The package {0} is not available ready-made for this system and Python, and building it here would need a"
        " compiler: use Python {wanted} on 64-bit Linux or macOS.",
    ),
    (
        r"Failed to build `?([\w.-]+)|error: command '\S*(?:cc|gcc|clang|c\+\+)\S*' failed|[Cc]ompiler .*not found",
        "The package {0} could not be built because this machine has no working compiler: use Python {wanted} on"
        " 64-bit Linux or macOS, for which it comes ready-made.",
    ),
    (
        r"[Hh]ash(?:es)? mismatch|DO NOT MATCH THE HASHES",
        "A downloaded package is not the one named in the lock file: nothing was installed; check the package index"
        " this machine is set up to use.",
    ),
)


class Refused(Exception):
    """The environment cannot be made; the message is one sentence."""


def wanted_version() -> str:
    return (PROJECT / ".python-version").read_text().strip()


def explain(output: str) -> str:
    """One sentence for what a tool printed."""
    for pattern, sentence in KNOWN_FAILURES:
        found = re.search(pattern, output)
        if found:
            named = [group for group in found.groups() if group] or ["that is needed"]
            return sentence.format(*named, wanted=wanted_version())
    last = [line.strip() for line in output.splitlines() if line.strip()][-1:]
    return "The environment could not be made: {} (see {}).".format(last[0] if last else "no reason given", LOG)


def run(command: list[str], environment: dict[str, str] | None = None) -> None:
    """Run a tool quietly; on failure refuse with a sentence, the whole output being in the log."""
    done = subprocess.run(command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, cwd=str(PROJECT))
    output = done.stdout.decode(errors="replace")
    with LOG.open("a", encoding="utf-8") as log:
        log.write("$ {}\n{}\n".format(" ".join(command), output))
    if done.returncode != 0:
        raise Refused(explain(output))


def python_version(candidate: str) -> tuple[tuple[int, int], str] | None:
    """The version and real path of a Python that can make environments, or None if it is not one."""
    ask = "import sys, venv; print('%d %d' % sys.version_info[:2]); print(sys.executable)"
    try:
        answer = subprocess.run(
            [candidate, "-I", "-c", ask], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, timeout=30
        )
        numbers, path = answer.stdout.decode().splitlines()
        major, minor = numbers.split()
        return (int(major), int(minor)), path
    except (OSError, ValueError, subprocess.TimeoutExpired):
        return None


def find_python() -> str | None:
    """The path of the wished Python, or of the oldest newer-than-needed one on this machine, or None."""
    wanted = tuple(int(part) for part in wanted_version().split("."))
    names = ["python" + wanted_version(), "python3.14", "python3.12", "python3", "python"]
    candidates = [path for path in map(shutil.which, names) if path] + [sys.executable]
    home = os.path.expanduser("~")
    for pattern in (
        os.path.join(os.environ.get("PYENV_ROOT", os.path.join(home, ".pyenv")), "versions/3.*/bin/python3"),
        os.path.join(home, ".local/share/uv/python/cpython-3.*/bin/python3"),
        "/usr/local/bin/python3.*[0-9]",
        "/opt/homebrew/bin/python3.*[0-9]",
        "/opt/python*/bin/python3",
    ):
        candidates += sorted(glob.glob(pattern))
    # A version manager's shim knows where the others are even when HOME does not lead there.
    for shim in filter(None, map(shutil.which, ("python3", "python"))):
        versions = Path(shim).resolve().parent.parent / "versions"
        candidates += sorted(glob.glob(str(versions / "3.*" / "bin" / "python3")))
    found: dict[tuple[int, int], str] = {}
    for candidate in dict.fromkeys(candidates):
        told = python_version(candidate)
        if told and told[0] >= OLDEST:
            found.setdefault(*told)
            if told[0] == wanted:
                return told[1]
    return found[min(found)] if found else None


def pip_settings() -> dict[str, str]:
    """What pip has been told about this machine's network, said to uv in uv's words.

    uv reads no pip configuration, and behind a company's mirror or certificate nothing else would work.
    """
    settings = dict(os.environ)
    settings.setdefault("UV_SYSTEM_CERTS", "1")
    told = subprocess.run(
        [sys.executable, "-m", "pip", "config", "list"], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL
    ).stdout.decode(errors="replace")
    for theirs, ours in (("index-url", "UV_DEFAULT_INDEX"), ("cert", "SSL_CERT_FILE")):
        value = os.environ.get("PIP_" + theirs.upper().replace("-", "_"))
        found = re.search(rf"^(?:global|install)\.{theirs}='(.*)'$", told, re.MULTILINE)
        if value or found:
            settings.setdefault(ours, value or found.group(1))
    return settings


def fingerprint(*paths: Path) -> str:
    digest = hashlib.sha256()
    for path in paths:
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def get_uv(python: str) -> Path:
    """The installer, itself locked by hash, in a folder of its own."""
    lock = PROJECT / "requirements-bootstrap.txt"
    folder = TOOLS / ("uv-" + fingerprint(lock))
    program = folder / "bin" / "uv"
    if program.exists():
        return program
    shutil.rmtree(str(folder), ignore_errors=True)
    print("Fetching the installer ...", flush=True)
    options = ["install", "--quiet", "--disable-pip-version-check", "--no-deps", "--only-binary=:all:"]
    options += ["--require-hashes", "--requirement", str(lock)]
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    for maker in dict.fromkeys((python, sys.executable)):
        if subprocess.run([maker, "-c", "import ensurepip"], **quiet).returncode == 0:
            run([maker, "-m", "venv", str(folder)])
            run([str(folder / "bin" / "python"), "-m", "pip", *options])
            return program
        if subprocess.run([maker, "-m", "pip", "--version"], **quiet).returncode == 0:
            run([maker, "-m", "pip", *options, "--target", str(folder)])
            return program
    raise Refused(
        "This Python has neither venv nor pip, so nothing can be installed: install one of them (on Debian and"
        " Ubuntu: apt-get install python3-venv) and run the command again."
    )


def make_environment(uv: Path, python: str | None, settings: dict[str, str]) -> None:
    told = python_version(str(ENVIRONMENT_PYTHON))
    if told and told[0] >= OLDEST:
        return
    shutil.rmtree(str(ENVIRONMENT), ignore_errors=True)
    print("Creating the environment ...", flush=True)
    try:
        run([str(uv), "venv", "--quiet", "--python", python or wanted_version(), str(ENVIRONMENT)], settings)
    except Refused as refused:
        if python:
            raise
        raise Refused(
            "No Python {}.{} or newer was found on this machine and none could be downloaded: install Python {} and"
            " run the command again.".format(*OLDEST, wanted_version())
        ) from refused


def install(requirements: Path) -> None:
    """Bring the environment up to the lock file, unless it is there already."""
    stamp = ENVIRONMENT / f".installed-{requirements.stem}-{fingerprint(requirements)}"
    if stamp.exists() and os.access(str(ENVIRONMENT_PYTHON), os.X_OK):
        return
    free_megabytes = shutil.disk_usage(str(PROJECT)).free // 1000000
    if free_megabytes < INSTALL_MEGABYTES:
        raise Refused(
            f"Only {free_megabytes} MB are free on the disk holding {PROJECT}, and about {INSTALL_MEGABYTES} MB are"
            " needed: free some space and run the command again."
        )
    TOOLS.mkdir(exist_ok=True)
    LOG.write_text("")
    python = find_python()
    uv = get_uv(python or sys.executable)
    settings = pip_settings()
    make_environment(uv, python, settings)
    print("Installing the locked packages ...", flush=True)
    # Never from source: no compiler is needed and no package's own build script runs.
    command = [str(uv), "pip", "install", "--quiet", "--python", str(ENVIRONMENT_PYTHON), "--no-build"]
    run([*command, "--require-hashes", "--requirement", str(requirements)], settings)
    stamp.touch()


def compile_kernels() -> None:
    """Compile the numerical kernels once for each state of their source, so that no answer waits for it."""
    methods = PROJECT / "analysis" / "methods"
    stamp = ENVIRONMENT / ".kernels-{}".format(fingerprint(*sorted(methods.glob("*.py"))))
    if stamp.exists():
        return
    print("Compiling the numerical kernels (once) ...", flush=True)
    run([str(ENVIRONMENT_PYTHON), "-m", "analysis.methods.warm"])
    stamp.touch()


def main() -> int:
    if len(sys.argv) != 2:
        print("usage: bootstrap.py REQUIREMENTS", file=sys.stderr)
        return 2
    try:
        install(PROJECT / sys.argv[1])
        compile_kernels()
    except Refused as refused:
        print(refused, file=sys.stderr)
        return 1
    except OSError as error:
        if error.errno not in (errno.ENOSPC, errno.EDQUOT):
            raise
        print(explain("No space left on device"), file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        print("Stopped; run the command again to go on from here.", file=sys.stderr)
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main())
