"""Exit codes, owned by one place, and the request to report a crash."""

from __future__ import annotations

from covariates.problems import ProblemsError

DONE = 0
OURS = 1
USER_CAN_MEND = 2

CRASH_ADVICE = (
    "popsim stopped because of a mistake of its own, not of yours. No result was written.\n"
    "Please report it with the study file and the lines above."
)


def problem_report(error: ProblemsError) -> str:
    """Every problem of one input, numbered when there are several."""
    count = len(error.problems)
    heading = "1 thing to mend" if count == 1 else f"{count} things to mend"
    return "\n\n".join([heading + ":", *(str(problem) for problem in error.problems)])
