"""`python -m config.services COMMAND`: demo, clean-demo, web, worker, scheduler.

`demo` starts everything on this machine. `web`, `worker` and `scheduler` become one process of an installation that
brings its own database and queue; that is what the containers run.
"""

from __future__ import annotations

import os
import shutil
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
            case _:
                print(__doc__, file=sys.stderr)
                return 2
    except (StartRefused, ImproperlyConfigured) as refused:
        print(refused, file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
