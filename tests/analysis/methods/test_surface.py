"""What the package offers: adding or taking away a name is a decision, so it shows up here."""

import os
import subprocess
import sys
from pathlib import Path

import analysis.methods

ROOT = Path(__file__).resolve().parents[3]


def test_the_public_names():
    assert sorted(analysis.methods.__all__) == [
        "FLAGS",
        "INTERVALS",
        "Interval",
        "InvalidInput",
        "MODELS",
        "MethodsError",
        "NotEstimable",
        "PooledEffect",
        "SampleSizePooledEffect",
        "Trail",
        "TrailStep",
        "UnknownChoice",
        "pool_by_sample_size",
        "pool_effects",
        "trail",
    ]
    assert all(hasattr(analysis.methods, name) for name in analysis.methods.__all__)


def run(*arguments, **environment):
    return subprocess.run(
        [sys.executable, *arguments], cwd=ROOT, env=os.environ | environment, capture_output=True, text=True, check=True
    )


def test_the_methods_import_nothing_of_django_or_of_the_rest_of_the_project():
    listing = run(
        "-c", "import sys, analysis.methods, analysis.methods.warm; print('\\n'.join(sys.modules))"
    ).stdout.split()
    ours = {name for name in listing if name.split(".")[0] in {"analysis", "api", "config", "dashboard", "evidence"}}
    assert "django" not in listing
    assert all(name == "analysis" or name.startswith("analysis.methods") for name in ours)


def test_compiled_code_is_kept_where_it_is_told_to_be(tmp_path):
    said = run("-m", "analysis.methods.warm", NUMBA_CACHE_DIR=str(tmp_path)).stdout
    assert str(tmp_path) in said
    assert list(tmp_path.rglob("*.nbi"))
    # A second process finds it there: no kernel is compiled and stored again.
    before = sorted((path.name, path.stat().st_mtime_ns) for path in tmp_path.rglob("*.nb?"))
    run("-m", "analysis.methods.warm", NUMBA_CACHE_DIR=str(tmp_path))
    assert sorted((path.name, path.stat().st_mtime_ns) for path in tmp_path.rglob("*.nb?")) == before
