"""Leaves what a search found: tables, texts, pictures, report.html, record.json, all written aside first."""

from __future__ import annotations

import base64
import json
from pathlib import Path
from typing import Any

from popsim.cautions import CAUTIONS
from popsim.finding.answer import Answer
from popsim.output import write_record, write_tables
from popsim.page import write_page
from popsim.provenance import plain, sheet_record, surroundings


def leave(answer: Answer, folder: Path, command: str, kind: str, seconds: float, threads: int, report: bool) -> None:
    """Write everything into `folder`; the pictures are there already."""
    write_tables(folder, answer.tables, kind)
    for name, text in answer.texts.items():
        (folder / name).write_text(text, encoding="utf-8")
    record = record_of_search(answer, command, seconds, threads)
    write_record(folder, record)
    if report:
        _write_report(answer, record, folder)


def record_of_search(answer: Answer, command: str, seconds: float, threads: int) -> dict[str, Any]:
    """What record.json holds. Timings stand here and nowhere else."""
    study = answer.asked.base
    return {
        "title": study.title, "question": study.question, "seed": study.seed, "command": command,
        "study_file": study.path.name, "study_digest_sha256": study.digest, "study": plain(study),
        "find": plain(answer.asked.section.find.model_dump()) | answer.numbers,
        "models": [sheet_record(model) for model in study.models],
        "cautions": list(CAUTIONS),
        **surroundings(),
        "timings": {"search_s": round(seconds, 3), "threads": threads},
    }


def _write_report(answer: Answer, record: dict[str, Any], folder: Path) -> None:
    write_page(folder / "report.html", "find.html.j2", study=answer.asked.base, record=record, parts=answer.parts,
               pictures=[(picture, base64.b64encode((folder / picture.file_name).read_bytes()).decode("ascii"))
                         for picture in answer.pictures])


def as_json_text(answer: Answer) -> str:
    """The answer for programs: what was found, its sentences, and its tables as they stand in the files."""
    tables = {name: table.astype(object).where(table.notna(), None).to_dict(orient="records")
              for name, table in answer.tables.items()}
    study = answer.asked.base
    return json.dumps({"title": study.title, "question": study.question, "seed": study.seed, "found": answer.numbers,
                       "sentences": [sentence for part in answer.parts for sentence in part.sentences], **tables,
                       "cautions": list(CAUTIONS)}, indent=2, ensure_ascii=False, default=_number)


def _number(value: Any) -> Any:
    """numpy's numbers as Python's."""
    return value.item()
