"""Data flows one way: a test walks the import statements."""

import ast
import re
from pathlib import Path

import covariates
import popsim

COVARIATES = Path(covariates.__file__).parent
POPSIM = Path(popsim.__file__).parent

# In order of the flow: a module may import only what stands before it.
FLOW = [
    "errors", "cautions", "screen", "lookup", "streams", "kernels",
    "patients.ages", "patients.survey", "patients.fit_survey", "patients.corner", "patients.possible",
    "patients.described", "patients.lattice", "patients.list_cells", "patients.listed", "patients.population",
    "records", "patients.draw", "study_records", "finding.wishes", "study_salvage", "study_values", "study_sections",
    "study_file", "study_described", "study_population", "study_loading", "study_protocols", "study_targets",
    "study_fit", "study", "groups", "slices", "parameters",
    "flagged", "amounts", "timeline", "solve", "effect", "target", "judging", "estimate", "clusters",
    "counted", "population_tally", "tally", "people", "run", "compare", "measures", "population_tables", "tables",
    "robustness", "words", "holds", "ward_card", "provenance", "output", "finished", "headlines",
    "drawing", "pictures.shown", "pictures.grid", "pictures.by_group", "pictures.over_time", "pictures.sides",
    "pictures.bands", "pictures.age_weight", "pictures.body_size", "pictures.models", "pictures.mic", "pictures.album",
    "patient_pictures", "page", "report", "terminal", "check_text", "progress",
    "scoring.files", "scoring.measures", "scoring.predict", "scoring.tables", "scoring.words", "scoring.pictures",
    "scoring.report", "scoring.run",
    "evidence.claims", "evidence.typical", "evidence.remifentanil", "evidence.mixed_fit", "evidence.open_data",
    "evidence.bodies", "evidence.mathematics", "evidence.check", "evidence.words",
    "derived", "model_text", "person_text",
    "finding.places", "finding.counting", "finding.holding", "finding.dose", "finding.size", "finding.table",
    "finding.map", "finding.answer", "finding.answer_dose", "finding.answer_size", "finding.answer_table",
    "finding.answer_map", "finding.pictures", "finding.leave",
    "commands.new", "commands.check", "commands.patients", "commands.judge", "commands.draw", "commands.find",
    "commands.models", "commands.person", "commands.score", "commands.evidence", "cli",
]  # fmt: skip
# Steps know nothing of each other: only run.py (and what reads a finished run) knows their order.
STEPS = {"groups", "patients.draw", "parameters", "timeline", "solve", "target", "estimate"}


def modules(folder: Path) -> dict[str, Path]:
    found = {}
    for path in sorted(folder.rglob("*.py")):
        if path.name != "__init__.py":
            found[".".join(path.relative_to(folder).with_suffix("").parts)] = path
    return found


def imported(path: Path, package: str) -> set[str]:
    """Modules of `package` that a file imports anywhere, also inside functions."""
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.split(".")[0] == package:
            rest = node.module[len(package) + 1:]
            inside = {f"{rest}.{alias.name}".strip(".") for alias in node.names if not alias.name.startswith("__")}
            packages = ("", "patients", "pictures", "finding", "scoring", "evidence", "commands")
            names |= inside if rest in packages else {rest}
        if isinstance(node, ast.Import):
            names |= {alias.name[len(package) + 1:] for alias in node.names if alias.name.split(".")[0] == package}
    return names


def outside_packages(path: Path) -> set[str]:
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module:
            names.add(node.module.split(".")[0])
        if isinstance(node, ast.Import):
            names |= {alias.name.split(".")[0] for alias in node.names}
    return names


def test_every_module_has_its_place_in_the_flow():
    assert sorted(modules(POPSIM)) == sorted(FLOW)


def test_the_architecture_list_is_complete_and_true():
    """Every module at the top by its file's name, every package by its folder's; and nothing that is not there."""
    text = (Path(__file__).resolve().parents[2] / "DEVELOPERS.md").read_text(encoding="utf-8")
    screen = text.split("```")[1]
    written = set(re.findall(r"\b(\w+)\.py\b", screen))
    for folder, found in ((COVARIATES, modules(COVARIATES)), (POPSIM, modules(POPSIM))):
        top = {name for name in found if "." not in name}
        assert top <= written, f"not in the list: {top - written}"
        packages = {name.split(".")[0] for name in found if "." in name}
        assert all(f" {name}/ " in screen for name in packages), folder
    there = {name.split(".")[-1] for name in (*modules(COVARIATES), *modules(POPSIM))}
    assert written <= there, f"in the list, but nowhere else: {written - there}"
    assert len(screen.splitlines()) <= 60


def test_imports_follow_the_flow():
    for name, path in modules(POPSIM).items():
        later = [other for other in imported(path, "popsim") if FLOW.index(other) >= FLOW.index(name)]
        assert not later, f"popsim/{name} imports what comes after it: {later}"


def test_steps_do_not_import_steps():
    for name, path in modules(POPSIM).items():
        if name in STEPS:
            assert not imported(path, "popsim") & STEPS - {name}, f"step {name} imports a step"


def test_covariates_stand_alone():
    for name, path in modules(COVARIATES).items():
        assert not imported(path, "popsim"), f"covariates/{name} imports popsim"
        heavy = outside_packages(path) & {"pandas", "numba", "scipy", "matplotlib", "pydantic", "click", "jinja2"}
        assert not heavy, f"covariates/{name} imports {heavy}"


def test_numba_only_in_kernels_and_kernels_import_nothing_of_ours():
    for name, path in modules(POPSIM).items():
        assert ("numba" in outside_packages(path)) == (name == "kernels")
    kernels = POPSIM / "kernels.py"
    assert outside_packages(kernels) <= {"__future__", "math", "numpy", "numba"}


def test_init_files_hold_no_code():
    for folder in (COVARIATES, POPSIM):
        for path in folder.rglob("__init__.py"):
            statements = ast.parse(path.read_text(encoding="utf-8")).body
            allowed = 1 if path == POPSIM / "__init__.py" else 0
            assert len(statements) <= allowed, path
