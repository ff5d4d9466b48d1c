"""Reads the published check data (`fixtures/check_data`, whose README names every source)."""

import csv
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).resolve().parents[3] / "fixtures" / "check_data"


def rows(name):
    """Rows of a table as dictionaries of text."""
    with (FOLDER / f"{name}.csv").open(newline="") as file:
        return list(csv.DictReader(file))


def column(name, heading):
    """One column as numbers."""
    return np.array([float(row[heading]) for row in rows(name)])


def data_set(name):
    """Effects and variances under the names used in the tables of computed values."""
    if name.startswith("bcg_ln_"):
        measure = name.removeprefix("bcg_")
        return log_ratios("bcg", "tb_vac", "n_vac", "tb_ctl", "n_ctl", measure)
    if name == "smoking_ln_or":
        return log_ratios("smoking", "quit_trt", "n_trt", "quit_ctl", "n_ctl", "ln_or")
    if name == "eight_schools":
        return column(name, "est"), column(name, "se") ** 2
    if name == "bias40":
        return column(name, "y"), column(name, "se") ** 2
    if name == "school_calendar_2level":
        return column("school_calendar", "d"), column("school_calendar", "var")
    assert name == "teacher_expectancy"
    return column(name, "d"), column(name, "var")


def log_ratios(name, events_1, total_1, events_2, total_2, measure):
    """Log odds or risk ratios from the counts, so that nothing is lost to the rounding of a printed table."""
    a, n1, c, n2 = (column(name, heading) for heading in (events_1, total_1, events_2, total_2))
    if measure == "ln_rr":
        return np.log((a / n1) / (c / n2)), 1 / a - 1 / n1 + 1 / c - 1 / n2
    b, d = n1 - a, n2 - c
    return np.log(a * d / (b * c)), 1 / a + 1 / b + 1 / c + 1 / d
