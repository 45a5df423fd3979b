"""Tables of a study as files."""

from __future__ import annotations

import io
from pathlib import Path
from typing import TYPE_CHECKING, Any

from generators.errors import InputError
from generators.files.atomic import atomic_write
from harness.analysis.means import Summary, summarise
from harness.studies.reading import Study, factor_column, runs_table

if TYPE_CHECKING:
    import pandas as pd

ENDINGS = (".csv", ".parquet")


def export_table(study: Study, table: str, path: Path) -> int:
    """Write a table as CSV or Parquet, by the file's ending.

    Parameters
    ----------
    study : Study
    table : {"runs", "conditions"}
    path : Path

    Returns
    -------
    int
        The number of rows written.

    Raises
    ------
    InputError
        For another ending, or where Parquet needs a package that is not installed.
    """
    if path.suffix not in ENDINGS:
        raise InputError(
            f"{path}: a table is written as {' or '.join(ENDINGS)}, got {path.suffix or 'no ending'!r}"
        )
    frame = table_frame(study, table)
    if path.suffix == ".csv":
        atomic_write(path, frame.to_csv(index=False, lineterminator="\n"))
    else:
        atomic_write(path, _parquet(frame, path))
    return len(frame)


def table_text(study: Study, table: str) -> str:
    """Return a table as CSV text."""
    return table_frame(study, table).to_csv(index=False, lineterminator="\n")


def table_frame(study: Study, table: str) -> pd.DataFrame:
    """Return a table: "runs", one row per run, or "conditions", one per condition, row count and learner."""
    import pandas as pd

    if table == "runs":
        return runs_table(study)
    rows = [_summary_row(study, summary) for summary in summarise(study.runs)]
    levels = {name: factor_column([row[name] for row in rows]) for name in study.runs.factors}
    return pd.DataFrame(rows).assign(**levels)


def _summary_row(study: Study, summary: Summary) -> dict[str, Any]:
    factors = study.facts.conditions[summary.cell.condition].factors
    row: dict[str, Any] = {
        **{name: factors.get(name) for name in study.runs.factors},
        "rows": summary.cell.rows,
        "label": summary.cell.label,
        "n_runs": summary.n_runs,
        f"n_{summary.unit}s": summary.n_units,
        "failed_share": summary.share_failed,
        "median_seconds": summary.durations.median,
    }
    for name, measure in summary.measures.items():
        row[name] = measure.mean.value
        row[f"{name}_mcse"] = measure.mean.mcse
        row[f"{name}_undefined_share"] = measure.share_undefined
    return row


def _parquet(frame: pd.DataFrame, path: Path) -> bytes:
    buffer = io.BytesIO()
    try:
        frame.to_parquet(buffer, index=False)
    except ImportError:
        raise InputError(
            f"{path}: Parquet needs the package pyarrow: pip install 'arcassay[parquet]', or write .csv"
        ) from None
    return buffer.getvalue()
