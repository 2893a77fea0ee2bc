"""Leaves a run's files whole or not at all: written aside, then renamed into place."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pandas as pd

from covariates.problems import Problem, ProblemsError
from popsim.flagged import covariates_used
from popsim.records import BlockRows
from popsim.study_records import Study

TABLE_NAMES = ("attainment", "over_time", "comparison", "groups", "doses", "values", "responses", "quartiles",
               "together", "models", "robustness", "people", "attainment_map", "body_size",
               "patients", "courses", "along", "confirm", "sizes", "simplicity", "ward_card", "map", "regions",
               "scores", "score_comparison", "score_patients", "score_predictions", "score_check")
OURS = {"record.json", "report.html", "ward_card.txt",
        *(f"{name}.{end}" for name in TABLE_NAMES for end in ("csv", "parquet"))}


def check_folder(folder: Path, overwrite: bool) -> None:
    """Raise ProblemsError where a run may not write: a file in the way, or other files without --overwrite."""
    if folder.exists() and not folder.is_dir():
        raise ProblemsError(Problem(str(folder), "a file, not a folder", "a folder to write into",
                                    "--out ANOTHER_FOLDER"))
    if folder.is_dir() and not os.access(folder, os.W_OK | os.X_OK):
        raise ProblemsError(Problem(str(folder), "a folder that cannot be written into", "a folder of your own",
                                    "--out ANOTHER_FOLDER"))
    if folder.is_dir() and any(folder.iterdir()) and not overwrite:
        raise ProblemsError(Problem(str(folder), "a folder that already holds files", "an empty or a new folder",
                                    "--overwrite replaces an earlier run's files there, or --out ANOTHER_FOLDER"))


@contextmanager
def written_aside(folder: Path) -> Iterator[Path]:
    """A scratch folder whose files take their place in `folder` only when all is done.

    An earlier run's files that this run does not write are removed; files that are not popsim's are never touched.
    """
    folder.parent.mkdir(parents=True, exist_ok=True)
    aside = Path(tempfile.mkdtemp(prefix=f".{folder.name}-unfinished-", dir=folder.parent))
    try:
        yield aside
        aside.chmod(0o777 & ~_umask())
        if not folder.exists():
            aside.rename(folder)
            return
        fresh = {path.name for path in aside.iterdir()}
        for path in folder.iterdir():
            if path.name not in fresh and (path.name in OURS or _is_picture(path)):
                path.unlink()
        for path in sorted(aside.iterdir(), key=lambda path: path.name == "record.json"):
            os.replace(path, folder / path.name)
    finally:
        shutil.rmtree(aside, ignore_errors=True)


@contextmanager
def replaced_whole(folder: Path) -> Iterator[Path]:
    """A scratch folder whose files take their place in `folder` only when all are written; the others there stay."""
    with tempfile.TemporaryDirectory(prefix=".unfinished-", dir=folder) as aside:
        yield Path(aside)
        for path in sorted(Path(aside).iterdir()):
            path.chmod(0o666 & ~_umask())
            os.replace(path, folder / path.name)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _is_picture(path: Path) -> bool:
    """Whether this is a picture that came from popsim, which signs its pictures: a PDF near its end."""
    if path.suffix not in (".svg", ".png", ".pdf") or not path.is_file():
        return False
    written = path.read_bytes()
    return b"popsim" in written[:2000] or (path.suffix == ".pdf" and b"popsim" in written)


def write_tables(folder: Path, tables: dict[str, pd.DataFrame], kind: str) -> None:
    for name, table in tables.items():
        if kind == "csv":
            table.to_csv(folder / f"{name}.csv", index=False, lineterminator="\n")
        else:
            table.to_parquet(folder / f"{name}.parquet", index=False)


def write_record(folder: Path, record: dict[str, Any]) -> None:
    text = json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False)
    (folder / "record.json").write_text(text + "\n", encoding="utf-8")


def check_format(kind: str) -> None:
    """Raise ProblemsError when Parquet is asked for and cannot be written."""
    if kind == "parquet":
        try:
            import pyarrow  # noqa: F401
        except ImportError:
            raise ProblemsError(Problem("--format parquet", "pyarrow is not installed", "--format csv",
                                        'Parquet needs the optional extra: pip install "popsim[parquet]"')) from None


class PatientRows:
    """Sink for the tables with a row per patient, written block by block so that memory stays flat."""

    def __init__(self, study: Study, folder: Path, kind: str, patients: bool, courses: bool):
        self._study, self._grid = study, study.grid_min()
        self._covariates = covariates_used(study)
        self._patients = _TableFile(folder / f"patients.{kind}") if patients else None
        self._courses = _TableFile(folder / f"courses.{kind}") if courses else None

    def __call__(self, rows: BlockRows) -> None:
        if self._patients is not None:
            self._patients.add(self._patient_table(rows))
        if self._courses is not None:
            self._courses.add(self._course_table(rows))

    def close(self) -> None:
        for table in (self._patients, self._courses):
            if table is not None:
                table.close()

    def _patient_table(self, rows: BlockRows) -> pd.DataFrame:
        patients = rows.patients
        columns: dict[str, Any] = {"patient": range(patients.first, patients.first + len(patients))}
        if patients.labels is not None:
            columns["label"] = patients.labels
        if patients.origins is not None:
            columns["list_row"] = patients.origins + 1
        columns |= patients.attributes
        columns |= {name: rows.lookup(name) for name in self._covariates if name not in columns}
        return pd.DataFrame(columns)

    def _course_table(self, rows: BlockRows) -> pd.DataFrame:
        """Patient by patient, then model, protocol and time."""
        n, times = len(rows.patients), len(self._grid)
        numbers = range(rows.patients.first, rows.patients.first + n)
        parts = []
        for model, protocol, plasma, site, effect in rows.courses:
            parts.append(pd.DataFrame({
                "patient": [number for number in numbers for _ in range(times)],
                "model": model, "protocol": protocol, "time_min": list(self._grid) * n,
                "plasma": plasma.ravel(), "effect_site": site.ravel(),
                "effect": effect.ravel() if effect is not None else float("nan")}))
        return pd.concat(parts).sort_values("patient", kind="stable")


class _TableFile:
    """One table written in parts, as CSV or Parquet by the file's ending."""

    def __init__(self, path: Path):
        self._path, self._writer = path, None

    def add(self, table: pd.DataFrame) -> None:
        if self._path.suffix == ".csv":
            new = not self._path.exists()
            table.to_csv(self._path, index=False, header=new, mode="w" if new else "a", lineterminator="\n")
            return
        import pyarrow as pa
        import pyarrow.parquet as pq

        rows = pa.Table.from_pandas(table, preserve_index=False)
        if self._writer is None:
            self._writer = pq.ParquetWriter(self._path, rows.schema)
        self._writer.write_table(rows)

    def close(self) -> None:
        if self._writer is not None:
            self._writer.close()
