"""Run benchmarks and print them: a table, or one JSON object a line with BENCH_JSON=1."""

import json
import os
from collections.abc import Callable, Iterable, Mapping
from typing import Any

Result = dict[str, Any]


def report(benchmarks: Iterable[Mapping[str, Callable[[], Result]]]) -> None:
    """Run every benchmark of some registries, each line printed as soon as it is known."""
    as_json = os.environ.get("BENCH_JSON") == "1"
    if not as_json:
        print(f"{'benchmark':<44}{'ours':>16}{'yardstick':>16}{'ratio':>10}")
    for registry in benchmarks:
        for run in registry.values():
            line = run()
            if as_json:
                print(json.dumps(line), flush=True)
                continue
            ours, theirs = (f"{line[name]:,.2f} {line['unit']}" for name in ("value", "yardstick"))
            print(f"{line['name']:<44}{ours:>16}{theirs:>16}{line['ratio']:>9.3g}x", flush=True)
            print(f"    {line['note']}")
