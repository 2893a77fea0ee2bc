"""How long 100 doses in 10,000 patients take on one core after compilation, beside one dose: run as a script."""

from __future__ import annotations

import time
from pathlib import Path

from popsim.finding.counting import count, read_asked
from popsim.finding.places import Varied, read_place
from popsim.progress import warmed_up
from popsim.study_file import read_study_file

STUDY = Path(__file__).resolve().parents[2] / "configs" / "find_remifentanil_rate.toml"


def seconds(asked, protocols: list) -> float:
    study = asked.study(protocols)
    started = time.perf_counter()
    count(study, threads=1)
    return time.perf_counter() - started


def main() -> None:
    section, _ = read_study_file(STUDY)
    protocol, find = section.protocol[0], section.find.model_copy(update={"wish": []})
    asked = read_asked(section.model_copy(update={"find": find}), STUDY)
    place = read_place("dose 1: rate", protocol, "")
    values = [Varied(place, (), "ug/kg/h", "rate_per_kg").quantity(number / 1000 / 60) for number in range(2, 102)]
    protocols = [place.put(protocol, value).model_copy(update={"name": value.text}) for value in values]
    warmed_up()
    seconds(asked, protocols[:1])
    one, many = seconds(asked, protocols[:1]), seconds(asked, protocols)
    print(f"1 dose {one:.2f} s; 100 doses {many:.2f} s, {many / one:.0f} times as long")


if __name__ == "__main__":
    main()
