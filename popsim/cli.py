"""The command line: parses, calls, and owns exit codes. Heavy imports happen inside the commands that need them."""

from __future__ import annotations

import signal
import sys

import click

from covariates.problems import ProblemsError
from popsim import __version__
from popsim.commands.check import check
from popsim.commands.draw import draw
from popsim.commands.evidence import evidence
from popsim.commands.find import find
from popsim.commands.judge import judge
from popsim.commands.models import models
from popsim.commands.new import new
from popsim.commands.patients import patients
from popsim.commands.person import person
from popsim.commands.score import score
from popsim.errors import CRASH_ADVICE, DONE, OURS, USER_CAN_MEND, problem_report

INTERRUPTED = 130  # what a shell expects of a program that was stopped


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80})
@click.version_option(__version__, message="popsim %(version)s")
def popsim() -> None:
    """How a dosing protocol performs in the people who will really receive it.

    \b
    popsim new study.toml      write a study to start from
    popsim check study.toml    see the ward card before anything is simulated
    popsim patients study.toml see its patients before any drug is given
    popsim judge study.toml    judge the protocols: tables, pictures, report
    popsim draw FOLDER         draw a finished run's pictures again
    popsim find dose study.toml
                               what to write instead; also find size, table, map
    popsim models              the published drug models; with a NAME one of them
    popsim person ...          every covariate of one person, side by side
    popsim score ...           which published model predicts measured patients
    popsim evidence            every outside check, recomputed

    A simulation for appraising protocols, not for dosing a person. Follow the
    product's label, local protocols and a licensed clinician's judgement.
    """


for command in (new, check, patients, judge, draw, find, models, person, score, evidence):
    popsim.add_command(command)


def main() -> None:
    """Run a command; every message goes to stderr, every way out through one exit code."""
    signal.signal(signal.SIGTERM, signal.default_int_handler)  # stopped from outside: tidied up as after Ctrl-C
    for stream in (sys.stdout, sys.stderr):
        stream.reconfigure(errors="replace")  # a title with signs that the terminal cannot show is no reason to stop
    sys.exit(run(sys.argv[1:]))


def run(arguments: list[str]) -> int:
    """Exit code of one command: 0 done, 2 the user can mend it, 1 ours."""
    try:
        return popsim.main(arguments, prog_name="popsim", standalone_mode=False) or DONE
    except ProblemsError as error:
        click.echo(problem_report(error), err=True)
        return USER_CAN_MEND
    except click.ClickException as error:
        error.show()
        return USER_CAN_MEND
    except (KeyboardInterrupt, click.Abort):
        click.echo("stopped; earlier results are as they were", err=True)
        return INTERRUPTED
    except BrokenPipeError:
        sys.stderr.close()
        return DONE
    except MemoryError:
        click.echo("not enough memory: ask for fewer times ([run] every), groups or patients", err=True)
        return USER_CAN_MEND
    except OSError as error:
        click.echo(f"{error.filename or 'a file'}: {error.strerror or error}", err=True)
        return USER_CAN_MEND
    except Exception:
        import traceback

        traceback.print_exc()
        click.echo(f"\n{CRASH_ADVICE}", err=True)
        return OURS
