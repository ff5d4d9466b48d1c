"""`python -m config.services COMMAND`.

`demo` starts everything on this machine and `clean-demo` deletes what it keeps. The others belong to an
installation that brings its own database and queue, and are what the containers run: `web`, `worker` and
`scheduler` become that process, `migrate` brings the tables and the service's database role up to date, `healthy`
asks the web server whether it can serve, `manage ARGUMENTS` is any management command.
"""

from __future__ import annotations

import http.client
import os
import shutil
import subprocess
import sys

from django.core.exceptions import ImproperlyConfigured

from config import environment
from config.services import commands, demo
from config.services.errors import StartRefused
from config.services.installation import RunLock
from config.services.postgresql import EmbeddedPostgreSQL


def clean_demo() -> None:
    """Delete the demo's database, queue, keys and logs, unless it is running."""
    folder = environment.data_folder()
    if not folder.exists():
        print("There is no demo data.")
        return
    with RunLock(folder, wait_seconds=60):
        database = EmbeddedPostgreSQL(folder / "postgresql")
        if database.folder.exists():
            database.remove()
        shutil.rmtree(folder)
    print(f"Deleted {folder}.")


def become(command: list[str]) -> None:
    """Replace this process by a program of the service."""
    os.execve(command[0], command, commands.process_environment(os.environ))


def migrate() -> int:
    """Bring the tables up to date as their owner, then give the service's role what it needs on them."""
    role = environment.text("STEELYARD_DATABASE_ROLE")
    owner = {name: value for name, value in os.environ.items() if name != "STEELYARD_DATABASE_ROLE"}
    steps = [["migrate", "--no-input"]] + ([["grant_service_role", role]] if role else [])
    for step in steps:
        status = subprocess.run(commands.manage(*step), env=owner, check=False).returncode
        if status != 0:
            return status
    return 0


def healthy() -> int:
    """0 if the web server of this container answers that it is ready."""
    port = environment.text("STEELYARD_BIND", "127.0.0.1:8000").rpartition(":")[2]
    # Under a name that the service answers to.
    host = environment.words("STEELYARD_HOSTS", default="localhost")[0]
    connection = http.client.HTTPConnection("127.0.0.1", int(port), timeout=8)
    try:
        connection.request("GET", "/health/ready", headers={"Host": host})
        answer = connection.getresponse()
        print(answer.status, answer.read().decode(errors="replace"))
        return 0 if answer.status == 200 else 1
    except OSError as error:
        print(error)
        return 1
    finally:
        connection.close()


def main(arguments: list[str]) -> int:
    """Carry out one command; a refusal is one sentence and exit status 1."""
    try:
        match arguments:
            case ["demo"]:
                demo.run()
            case ["clean-demo"]:
                clean_demo()
            case ["web"]:
                become(
                    commands.web(
                        address=environment.text("STEELYARD_BIND", "127.0.0.1:8000"),
                        processes=environment.whole_number("STEELYARD_WEB_PROCESSES", default=2, minimum=1),
                    )
                )
            case ["worker"]:
                become(
                    commands.worker(
                        processes=environment.whole_number("STEELYARD_WORKER_PROCESSES", default=2, minimum=1)
                    )
                )
            case ["scheduler"]:
                become(commands.scheduler())
            case ["manage", *rest]:
                become(commands.manage(*rest))
            case ["migrate"]:
                return migrate()
            case ["healthy"]:
                return healthy()
            case _:
                print(__doc__, file=sys.stderr)
                return 2
    except (StartRefused, ImproperlyConfigured) as refused:
        print(refused, file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
