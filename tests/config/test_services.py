"""The service runner: the embedded database, processes that cannot outlive it, refusals in one sentence.

What is expected here is what the design promises of `make demo`; there is no outside source for it. The tools'
failure messages were printed by the tools named beside them.
"""

from __future__ import annotations

import errno
import os
import secrets
import shutil
import signal
import socket
import stat
import subprocess
import sys
import tempfile
import textwrap
import time
from collections.abc import Iterator
from pathlib import Path

import psutil
import psycopg
import pytest

from config.services import bootstrap, commands, installation
from config.services.errors import StartRefused, refuse_when_disk_is_full, require_free_space
from config.services.postgresql import DISPOSABLE, EmbeddedPostgreSQL
from config.services.processes import wait_until

PROJECT = Path(__file__).resolve().parents[2]


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """A folder that every account may pass through, as a data folder is."""

    folder = Path(tempfile.mkdtemp(prefix="steelyard-services-"))
    folder.chmod(0o711)
    yield folder
    shutil.rmtree(folder)


# --- The embedded database -----------------------------------------------------------------------------------


@pytest.fixture
def database(open_folder: Path) -> Iterator[EmbeddedPostgreSQL]:
    server = EmbeddedPostgreSQL(open_folder / "postgresql", settings=DISPOSABLE)
    server.start()
    server.ensure_database()
    yield server
    server.remove()


def one(url: str, statement: str) -> object:
    with psycopg.connect(url, autocommit=True) as connection:
        row = connection.execute(statement).fetchone()
    assert row is not None
    return row[0]


def test_the_embedded_database_opens_no_network_port(database: EmbeddedPostgreSQL) -> None:
    assert one(database.url(), "SHOW listen_addresses") == ""
    assert database.child is not None
    connections = psutil.Process(database.child.process.pid).net_connections(kind="inet")
    assert [c for c in connections if c.status == psutil.CONN_LISTEN] == []


def test_the_embedded_database_asks_for_its_password(database: EmbeddedPostgreSQL) -> None:
    host = database.url().partition("?host=")[2]
    with pytest.raises(psycopg.OperationalError, match="password"):
        psycopg.connect(f"postgresql://steelyard@/steelyard?host={host}", passfile=os.devnull)
    with pytest.raises(psycopg.OperationalError, match="password authentication failed"):
        psycopg.connect(f"postgresql://steelyard:wrong@/steelyard?host={host}")


def test_the_password_file_is_private(database: EmbeddedPostgreSQL) -> None:
    assert stat.S_IMODE((database.folder / "password").stat().st_mode) == 0o600


def test_the_server_does_not_run_as_root(database: EmbeddedPostgreSQL) -> None:
    assert database.child is not None
    assert psutil.Process(database.child.process.pid).uids().effective != 0


def test_committed_data_are_there_after_a_crash_and_a_stale_lock_file_is_no_obstacle(open_folder: Path) -> None:
    server = EmbeddedPostgreSQL(open_folder / "postgresql")
    server.start()
    server.ensure_database()
    with psycopg.connect(server.url(), autocommit=True) as connection:
        connection.execute("CREATE TABLE kept (number integer)")
        connection.execute("INSERT INTO kept VALUES (812)")
    assert server.child is not None
    server.child.kill()
    lock = server.cluster / "postmaster.pid"
    assert lock.exists()
    # The crashed server's number has meanwhile been given to another process: this one.
    lines = lock.read_text().splitlines()
    lock.write_text("\n".join([str(os.getpid()), *lines[1:]]) + "\n")

    again = EmbeddedPostgreSQL(open_folder / "postgresql")
    again.start()
    assert one(again.url(), "SELECT number FROM kept") == 812
    again.remove()


def test_a_server_left_running_is_stopped_and_taken_over(open_folder: Path) -> None:
    left = EmbeddedPostgreSQL(open_folder / "postgresql", settings=DISPOSABLE)
    old = left.start()
    again = EmbeddedPostgreSQL(open_folder / "postgresql", settings=DISPOSABLE)
    new = again.start()
    assert old.process.wait(10) == 0
    assert new.is_running()
    again.remove()


def test_a_first_start_that_was_cut_short_is_begun_anew(open_folder: Path) -> None:
    folder = open_folder / "postgresql"
    (folder / "unfinished").mkdir(parents=True)
    (folder / "unfinished" / "PG_VERSION").write_text("18\n")
    server = EmbeddedPostgreSQL(folder, settings=DISPOSABLE)
    server.start()
    assert one(server.url("postgres"), "SELECT 1") == 1
    server.remove()


def test_data_of_another_major_version_are_refused_in_one_sentence(open_folder: Path) -> None:
    server = EmbeddedPostgreSQL(open_folder / "postgresql", settings=DISPOSABLE)
    server.cluster.mkdir(parents=True)
    (server.cluster / "PG_VERSION").write_text("15\n")
    with pytest.raises(StartRefused, match=r"written by PostgreSQL 15.*DATABASE_URL"):
        server.start()
    assert (server.cluster / "PG_VERSION").read_text() == "15\n"


def test_a_long_path_to_the_data_does_not_stop_the_server(open_folder: Path) -> None:
    deep = open_folder / ("a" * 60) / ("b" * 60)
    deep.mkdir(parents=True)
    server = EmbeddedPostgreSQL(deep / "postgresql", settings=DISPOSABLE)
    server.start()
    assert one(server.url("postgres"), "SELECT 1") == 1
    server.remove()


def test_in_a_private_folder_the_server_runs_and_the_folder_stays_private(open_folder: Path) -> None:
    private = open_folder / "private"
    private.mkdir(mode=0o700)
    server = EmbeddedPostgreSQL(private / "postgresql", settings=DISPOSABLE)
    server.start()
    assert one(server.url("postgres"), "SELECT 1") == 1
    assert stat.S_IMODE(private.stat().st_mode) == 0o700
    # Started by root it runs under an account that cannot enter there, and keeps its data elsewhere.
    assert (private in server.folder.parents) == (os.geteuid() != 0)
    server.remove()
    assert not server.folder.exists()


# --- Processes that cannot outlive the runner ----------------------------------------------------------------

RUNNER = """
    import subprocess, sys, time
    from config.services.processes import Watchdog, start

    program = (
        "import signal, subprocess, sys, time;"
        "signal.signal(signal.SIGTERM, signal.SIG_IGN);"
        "inner = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(600)', sys.argv[1]]);"
        "print('ready', flush=True); time.sleep(600)"
    )
    with Watchdog() as watchdog:
        child = start(
            "stubborn", [sys.executable, "-c", program, sys.argv[1]], environment={},
            log=sys.stdout.fileno(), grace_seconds=0.5,
        )
        watchdog.guard(child)
        time.sleep(600)
"""


def processes_named(mark: str) -> list[psutil.Process]:
    found = []
    for process in psutil.process_iter(["cmdline"]):
        if mark in (process.info["cmdline"] or []):
            found.append(process)
    return found


def test_children_and_grandchildren_end_when_the_runner_is_killed() -> None:
    mark = f"steelyard-mark-{secrets.token_hex(8)}"
    runner = subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(RUNNER), mark],
        cwd=PROJECT,
        stdout=subprocess.PIPE,
        start_new_session=True,
    )
    assert runner.stdout is not None
    assert runner.stdout.readline() == b"ready\n"
    assert len(processes_named(mark)) == 3  # The runner, its child that ignores SIGTERM, and the child's child.
    runner.kill()
    runner.wait()
    runner.stdout.close()
    assert wait_until(lambda: processes_named(mark) == [], seconds=10)


# --- One at a time -------------------------------------------------------------------------------------------


def test_a_second_run_on_the_same_data_is_refused_and_told_which_process_holds_them(tmp_path: Path) -> None:
    with (
        installation.RunLock(tmp_path),
        pytest.raises(StartRefused, match=f"already running on .* \\(process {os.getpid()}\\)"),
        installation.RunLock(tmp_path),
    ):
        pass
    with installation.RunLock(tmp_path):
        assert (tmp_path / "lock").read_text().split()[0] == str(os.getpid())


def test_after_a_crash_a_start_waits_until_the_watchdog_is_done(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    program = (
        "import os, subprocess, sys; from pathlib import Path;"
        "from config.services.installation import RunLock;"
        "lock = RunLock(Path(sys.argv[1])).__enter__();"
        "subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(1.5)'], pass_fds=[lock.descriptor]);"
        "print('held', flush=True); os._exit(1)"
    )
    crashed = subprocess.Popen([sys.executable, "-c", program, str(tmp_path)], cwd=PROJECT, stdout=subprocess.PIPE)
    assert crashed.stdout is not None
    assert crashed.stdout.readline() == b"held\n"
    crashed.wait()
    crashed.stdout.close()
    begun = time.monotonic()
    with installation.RunLock(tmp_path, wait_seconds=30):
        assert time.monotonic() - begun > 0.5
    assert "earlier run" in capsys.readouterr().out


# --- Refusals in one sentence --------------------------------------------------------------------------------


def run_demo(folder: Path, **variables: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "config.services", "demo"],
        cwd=PROJECT,
        env=os.environ | {"STEELYARD_DATA": str(folder), **variables},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


def test_a_port_in_use_is_named_together_with_the_way_out(tmp_path: Path) -> None:
    with socket.create_server(("127.0.0.1", 0)) as server:
        port = server.getsockname()[1]
        done = run_demo(tmp_path / "data", STEELYARD_PORT=str(port))
    assert done.returncode == 1
    assert done.stderr == (
        f"Port {port} is already in use on this machine: stop what is using it, or choose another port, for"
        f" instance STEELYARD_PORT={port + 1} make demo.\n"
    )
    assert done.stdout == ""


def test_a_port_that_is_no_number_is_refused_by_name(tmp_path: Path) -> None:
    done = run_demo(tmp_path / "data", STEELYARD_PORT="http")
    assert (done.returncode, done.stderr) == (1, "STEELYARD_PORT must be a whole number, not 'http'.\n")


def test_too_little_room_on_the_disk_is_refused_before_anything_is_written(tmp_path: Path) -> None:
    with pytest.raises(StartRefused, match=r"Only \d+ MB are free .* free some space, or set STEELYARD_DATA"):
        require_free_space(tmp_path, megabytes=10**12)
    require_free_space(tmp_path, megabytes=0)


def test_a_full_disk_is_told_as_such_and_other_errors_are_left_alone(tmp_path: Path) -> None:
    with pytest.raises(StartRefused, match="is full: free some space"):
        refuse_when_disk_is_full(OSError(errno.ENOSPC, "No space left on device"), tmp_path)
    refuse_when_disk_is_full(OSError(errno.EACCES, "Permission denied"), tmp_path)


# Printed by uv 0.13 and pip 26 (those in capitals), shortened to the lines that matter.
TOOL_MESSAGES = [
    (
        "error: Request failed after 3 retries in 6.9s\n"
        "  cause: error sending request for url (https://index.example/simple/kombu/)\n"
        "  cause: tcp connect error\n  cause: Connection refused (os error 111)\n",
        "The package index could not be reached",
    ),
    (
        "error: No solution found when resolving dependencies\n  cause: Because docopt==0.6.2 has no usable wheels"
        " and you require docopt==0.6.2, we can conclude that your requirements are unsatisfiable.\n",
        "The package docopt is not available ready-made for this system",
    ),
    (
        "  x Failed to build `docopt==0.6.2`\n  error: command 'gcc' failed: No such file or directory\n",
        "The package docopt could not be built because this machine has no working compiler",
    ),
    (
        "WARNING: Retrying (Retry(total=4)) after connection broken by 'NewConnectionError': /simple/uv/\n"
        "ERROR: Could not find a version that satisfies the requirement uv==0.13.9 (from versions: none)\n"
        "ERROR: No matching distribution found for uv==0.13.9\n",
        "The package index could not be reached",
    ),
    ("error: failed to write to file: No space left on device (os error 28)\n", "is full: free about 1500 MB"),
    (
        "ERROR: THESE PACKAGES DO NOT MATCH THE HASHES FROM THE REQUIREMENTS FILE.\n",
        "A downloaded package is not the one named in the lock file",
    ),
    ("error: something new\n", "The environment could not be made: error: something new (see "),
]


@pytest.mark.parametrize(("printed", "told"), TOOL_MESSAGES)
def test_a_failed_installation_is_told_in_one_sentence(printed: str, told: str) -> None:
    sentence = bootstrap.explain(printed)
    assert told in sentence
    assert "\n" not in sentence


# --- What is generated once ----------------------------------------------------------------------------------


def test_the_sign_in_and_the_key_are_generated_once_and_private(tmp_path: Path) -> None:
    installation.prepare_folder(tmp_path)
    installation.ensure_secret_key(tmp_path)
    first = installation.ensure_sign_in(tmp_path)
    key = (tmp_path / "secret-key").read_text()
    installation.ensure_secret_key(tmp_path)
    assert installation.ensure_sign_in(tmp_path) == first
    assert (tmp_path / "secret-key").read_text() == key
    assert len(key.strip()) >= 64
    for name in ("secret-key", "sign-in"):
        assert stat.S_IMODE((tmp_path / name).stat().st_mode) == 0o600


def test_two_installations_share_no_secret(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    for name in ("a", "b"):
        installation.ensure_secret_key(tmp_path / name)
    assert installation.ensure_sign_in(tmp_path / "a") != installation.ensure_sign_in(tmp_path / "b")
    assert (tmp_path / "a" / "secret-key").read_text() != (tmp_path / "b" / "secret-key").read_text()


def test_an_unknown_command_of_the_runner_prints_how_to_use_it() -> None:
    done = subprocess.run(
        [sys.executable, "-m", "config.services", "dance"], cwd=PROJECT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert "python -m config.services COMMAND" in done.stderr


def test_the_worker_is_given_longer_to_stop_than_its_running_task(settings: object) -> None:
    assert commands.WORKER_STOP_SECONDS > settings.CELERY_WORKER_SOFT_SHUTDOWN_TIMEOUT  # type: ignore[attr-defined]
    assert commands.process_environment({})["REMAP_SIGTERM"] == signal.SIGQUIT.name
