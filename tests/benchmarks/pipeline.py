"""What a study costs per patient and protocol, and how much memory: python tests/benchmarks/pipeline.py [million ...]

A script, not a test. Propofol (three compartments, effect site), a window of 3 h, 181 times of the tables, four groups,
one or two protocols of three steps, tables only. Prints processor time per patient and protocol, on one thread and two,
the marginal cost of patients and of a second protocol, linearity, and the peak memory of each run of a new process.
With numbers, these many million patients instead, each in a process of its own on two threads.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from pathlib import Path

PROTOCOL = """
[[protocol]]
name = "{name}"
[[protocol.dose]]
amount = "{bolus} mg/kg"
over = "30 s"
[[protocol.dose]]
rate = "8 mg/kg/h"
until = "20 min"
[[protocol.dose]]
at = "20 min"
rate = "6 mg/kg/h"
until = "150 min"
"""
STUDY = """
title = "benchmark"
question = "how fast?"
seed = 1
[population]
source = "survey"
count = {count}
age = "20 to 90 years"
[population.set]
opioid = true
venous_sampling = false
[[group]]
name = "obese"
where = "bmi >= 30"
[[group]]
name = "old"
where = "age >= 65"
[[group]]
name = "women"
where = "sex == 'female'"
[drug]
model = "propofol_eleveld_2018"
{protocols}
[target]
quantity = "effect_site"
range = "2 to 4 ug/mL"
during = "0 min to 180 min"
attained_when = "80 % of the time"
[run]
until = "180 min"
every = "1 min"
"""
RUN = """
import json, resource, sys, time
from pathlib import Path
from popsim.progress import warmed_up
from popsim.run import simulate
from popsim.study import read_study
warmed_up()
study = read_study(Path(sys.argv[1]))
loaded = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
wall, processor = time.perf_counter(), time.process_time()
simulate(study, int(sys.argv[2]))
print(json.dumps({"wall": time.perf_counter() - wall, "cpu": time.process_time() - processor, "loaded": loaded,
                  "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024}))
"""


def run(count: int, protocols: int = 1, threads: int = 1, repeats: int = 3) -> dict[str, float]:
    """The fastest of some new processes."""
    text = STUDY.format(count=count, protocols="".join(
        PROTOCOL.format(name=f"card {k}", bolus=1 + k / 2) for k in range(protocols)))
    with tempfile.TemporaryDirectory() as folder:
        study = Path(folder) / "study.toml"
        study.write_text(text, encoding="utf-8")
        found = [json.loads(subprocess.run([sys.executable, "-c", RUN, str(study), str(threads)], check=True,
                                           capture_output=True, text=True).stdout) for _ in range(repeats)]
    return min(found, key=lambda one: one["cpu"])


def main() -> None:
    if len(sys.argv) > 1:
        for million in map(float, sys.argv[1:]):
            count = int(million * 1e6)
            found = run(count, threads=2, repeats=1)
            print(f"{count:9,} patients: {found['wall']:6.1f} s, {found['cpu'] / count * 1e6:5.2f} us of processor "
                  f"each, peak {found['peak']:.0f} MB")
        return
    few, many = 20_000, 100_000
    small, large, two, threads = run(few), run(many), run(many, protocols=2), run(many, threads=2)
    print("us of processor")
    print(f"  a patient and protocol, {few:,}     {small['cpu'] / few * 1e6:6.2f}")
    print(f"  a patient and protocol, {many:,}    {large['cpu'] / many * 1e6:6.2f}")
    print(f"  a further patient                 {(large['cpu'] - small['cpu']) / (many - few) * 1e6:6.2f}")
    print(f"  a further protocol of a patient   {(two['cpu'] - large['cpu']) / many * 1e6:6.2f}")
    print(f"two threads                         {large['wall'] / threads['wall']:6.2f} times as fast")
    for label, found in (("one protocol", large), ("two protocols", two), ("one protocol, two threads", threads)):
        print(f"memory, {label:27} {found['peak']:6.0f} MB, of which loaded code {found['loaded']:.0f} MB")


if __name__ == "__main__":
    main()
