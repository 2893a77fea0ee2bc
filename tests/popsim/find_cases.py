"""Studies that several tests of searches share, written as a user writes them."""

from __future__ import annotations

import runpy
from pathlib import Path

from popsim.finding.counting import Asked, read_asked
from popsim.study_file import read_study_file
from popsim.study_sections import ProtocolSection

cases = runpy.run_path(str(Path(__file__).with_name("judge_cases.py")))
LOGNORMAL = 'CL = {{ value = {omega}, printed_as = "sd of ln", evidence = "seen" }}'
STEADY = 'quantity = "plasma"\nrange = "{range}"\nduring = "600 min"\nattained_when = "at the end"\n'
ADULT = '[find.reference]\nsex = "male"\nage = "40 years"\nweight = "70 kg"\nheight = "176 cm"\n'


def one_compartment(folder: Path, clearance: str = "0.5", volume: str = "10", omega: float = 0.3,
                    more: str = "") -> str:
    """A sheet with lognormal clearance; returns the path that a study names."""
    return cases["sheet"](folder, "one", volume, clearance, more, LOGNORMAL.format(omega=omega))


def find_file(folder: Path, find: str, **study) -> Path:
    """The path of a study of `judge_cases.study` with this [find] at its end."""
    cases["study"](folder, **study)
    path = folder / "study.toml"
    path.write_text(f"{path.read_text(encoding='utf-8')}\n{find}", encoding="utf-8")
    return path


def asked_of(path: Path) -> tuple[Asked, ProtocolSection]:
    """What a study asks to find, and its first protocol."""
    section, faults = read_study_file(path)
    assert not faults, faults
    return read_asked(section, path), section.protocol[0]
