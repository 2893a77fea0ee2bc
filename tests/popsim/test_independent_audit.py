"""Two shipped studies judged a second time by other means, from the table of patients on.

Independent of popsim, typed anew from the papers and not read from the sheets (Minto 1997, Eleveld 2018, James 1976,
Al-Sallami 2015 with Janmahasatian 2005, Devine 1974, Newcombe 1998): body size, parameters, who gets what, the course
(scipy.linalg.expm in steps of 0.02 min), time in range (straight lines between the steps), attainment, groups, paired
differences. Not independent: the people themselves (patients.csv), and the random numbers, of which each patient's own
are found by the block and slot that popsim says they came from; their SDs, and what they are applied to, are typed anew.
The papers' numbers are in part from memory, here as in the sheets: an error of memory common to both is not found.
"""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy.linalg import expm

from popsim.cli import run as popsim_run
from popsim.errors import DONE
from popsim.run import simulate
from popsim.streams import normals
from popsim.study import read_study

CONFIGS = Path(__file__).parents[2] / "configs"
STEP_MIN = 0.02
SEED = 20261201


def james(p):
    man = p.sex == "male"
    return np.where(man, 1.10, 1.07) * p.weight - np.where(man, 128, 148) * (p.weight / p.height) ** 2


def bmi(p):
    return p.weight / (p.height / 100) ** 2


def fat_free(man, age, weight, height_m):
    """Al-Sallami 2015."""
    index = weight / height_m**2
    lean = 9270 * weight / np.where(man, 6680 + 216 * index, 8780 + 244 * index)
    return np.where(man, 0.88 + 0.12 / (1 + (age / 13.4) ** -12.7), 1.11 - 0.11 / (1 + (age / 7.1) ** -1.1)) * lean


def adjusted_weight(p):
    ideal = np.where(p.sex == "male", 50.0, 45.5) + 2.3 * (p.height / 2.54 - 60)
    return ideal + 0.4 * (p.weight - ideal)


def minto(p, luck):
    since, lean = p.age - 40, james(p) - 55
    return SimpleNamespace(
        V1=(5.1 - 0.0201 * since + 0.072 * lean) * np.exp(0.26 * luck("V1")),
        V2=(9.82 - 0.0811 * since + 0.108 * lean) * np.exp(0.29 * luck("V2")),
        V3=5.42 * np.exp(0.66 * luck("V3")),
        CL=(2.6 - 0.0162 * since + 0.0191 * lean) * np.exp(0.14 * luck("CL")),
        Q2=(2.05 - 0.0301 * since) * np.exp(0.36 * luck("Q2")),
        Q3=(0.076 - 0.00113 * since) * np.exp(0.41 * luck("Q3")),
        ke0=(0.595 - 0.007 * since) * np.exp(0.68 * luck("ke0")),
    )


def eleveld(p, luck):
    """An opioid alongside, arterial."""
    def hill(x, half, slope=1.0):
        return x**slope / (x**slope + half**slope)

    man, size, weeks, reference_weeks = p.sex == "male", p.weight / 70, 52.143 * p.age + 40, 52.143 * 35 + 40
    lean = fat_free(man, p.age, p.weight, p.height / 100) / fat_free(True, 35.0, 70.0, 1.70)
    V1 = 6.28 * hill(p.weight, 33.6) / hill(70, 33.6) * np.exp(0.610 * luck("V1"))
    V2 = 25.5 * size * np.exp(-0.0156 * (p.age - 35)) * np.exp(0.565 * luck("V2"))
    V3 = 273 * lean * np.exp(-0.0138 * p.age) * np.exp(0.597 * luck("V3"))
    CL = (np.where(man, 1.79, 2.10) * size**0.75 * hill(weeks, 42.3, 9.06) / hill(reference_weeks, 42.3, 9.06)
          * np.exp(-0.00286 * p.age) * np.exp(0.265 * luck("CL")))  # fmt: skip
    Q2 = 1.75 * (V2 / 25.5) ** 0.75 * (1 + 1.30 * (1 - hill(weeks, 68.3))) * np.exp(0.346 * luck("Q2"))
    Q3 = 1.11 * (V3 / 273) ** 0.75 * hill(weeks, 68.3) / hill(reference_weeks, 68.3) * np.exp(0.209 * luck("Q3"))
    ke0 = 0.146 * size**-0.25 * np.exp(0.702 * luck("ke0"))
    half = 3.08 * np.exp(-0.00635 * (p.age - 35)) * np.exp(0.242 * luck("C50"))
    return SimpleNamespace(V1=V1, V2=V2, V3=V3, CL=CL, Q2=Q2, Q3=Q3, ke0=ke0, half=half)


def bis(x, site):
    half = x.half[:, None]
    steepness = np.where(site <= half, 1.89, 1.47)
    return 93.0 * half**steepness / (half**steepness + site**steepness)


def rounded_propofol(size, minute):
    """mg/min at a minute: 1.5 mg/kg in 30 s, rounded half up to 10 mg, beside 10, 8, 6 mg/kg/h."""
    bolus = np.floor(1.5 * size / 10 + 0.5) * 10 / 0.5 if minute < 0.5 else 0.0
    return bolus + (10 if minute < 10 else 8 if minute < 20 else 6) * size / 60


STUDIES = {
    "remifentanil_fixed_rate": SimpleNamespace(
        model=minto, low=0.003, high=0.006, start=15, quantity=lambda x, site: site,
        given={"600 ug/h": lambda p, minute: np.full(len(p.age), 0.6 / 60),
               "900 ug/h": lambda p, minute: np.full(len(p.age), 0.9 / 60)},
        groups={"all": lambda p: p.age > 0, "under 65, BMI < 30": lambda p: (p.age < 65) & (bmi(p) < 30),
                "65 and over": lambda p: p.age >= 65, "75 and over": lambda p: p.age >= 75}),
    "propofol_body_size": SimpleNamespace(
        model=eleveld, low=40.0, high=60.0, start=10, quantity=bis,
        given={"total weight": lambda p, minute: rounded_propofol(p.weight, minute),
               "adjusted weight": lambda p, minute: rounded_propofol(adjusted_weight(p), minute)},
        groups={"all": lambda p: p.age > 0, "BMI under 30, under 65": lambda p: (bmi(p) < 30) & (p.age < 65),
                "BMI 35 and over": lambda p: bmi(p) >= 35, "75 and over": lambda p: p.age >= 75}),
}  # fmt: skip


def effect_site(x, rate_at, until_min):
    """(n, steps + 1) mg/L: amounts in three compartments, the effect site's level and the rate as five states."""
    n = len(x.V1)
    A = np.zeros((n, 5, 5))
    V1, V2, V3 = (np.broadcast_to(v, n) for v in (x.V1, x.V2, x.V3))
    A[:, 0, 0] = -(x.CL + x.Q2 + x.Q3) / V1
    A[:, 0, 1], A[:, 1, 0], A[:, 1, 1] = x.Q2 / V2, x.Q2 / V1, -x.Q2 / V2
    A[:, 0, 2], A[:, 2, 0], A[:, 2, 2] = x.Q3 / V3, x.Q3 / V1, -x.Q3 / V3
    A[:, 3, 0], A[:, 3, 3], A[:, 0, 4] = x.ke0 / V1, -x.ke0, 1.0
    step = expm(A * STEP_MIN)
    state, site = np.zeros((n, 5)), [np.zeros(n)]
    for k in range(round(until_min / STEP_MIN)):
        state[:, 4] = rate_at((k + 0.5) * STEP_MIN)
        state = np.einsum("nij,nj->ni", step, state)
        site.append(state[:, 3])
    return np.array(site).T


def shares(course, low, high):
    """Shares of the window under, within and over, by straight lines between the steps."""
    def under(limit):
        first, last = course[:, :-1], course[:, 1:]
        with np.errstate(all="ignore"):
            crossing = (limit - first) / (last - first)
        rising, both = first < limit, (first < limit) == (last < limit)
        part = np.where(both, rising, np.where(rising, crossing, 1 - crossing))
        return part.mean(axis=1)

    return under(low), under(high) - under(low), 1 - under(high)  # fmt: skip


def newcombe(a, b):
    """Difference b - a of paired shares with its interval: Newcombe 1998, method 10, score limits as roots."""
    n, z2 = len(a), 1.959963984540054**2
    e, f, g, h = (int(np.sum(x)) for x in (a & b, b & ~a, a & ~b, ~a & ~b))

    def limits(count):
        roots = np.roots([1 + z2 / n, -(2 * count / n + z2 / n), (count / n) ** 2]).real
        return roots.min(), roots.max()

    (l2, u2), (l3, u3), p2, p3 = limits(e + f), limits(e + g), (e + f) / n, (e + g) / n
    cross, product = e * h - f * g, (e + f) * (g + h) * (e + g) * (f + h)
    phi = (max(cross - n / 2, 0) if cross > 0 else cross) / product**0.5 if product else 0.0
    down = ((p2 - l2) ** 2 - 2 * phi * (p2 - l2) * (u3 - p3) + (u3 - p3) ** 2) ** 0.5
    up = ((p3 - l3) ** 2 - 2 * phi * (p3 - l3) * (u2 - p2) + (u2 - p2) ** 2) ** 0.5
    return p2 - p3, p2 - p3 - down, p2 - p3 + up


@pytest.fixture(scope="module", params=STUDIES)
def audit(request, tmp_path_factory):
    """What popsim leaves, and the same found here."""
    folder, asked = tmp_path_factory.mktemp("audit"), STUDIES[request.param]
    path = folder / "study.toml"
    path.write_text((CONFIGS / f"{request.param}.toml").read_text().replace("count = 10000", "count = 300"))
    assert popsim_run(["judge", str(path), "--out", str(folder / "run"), "--tables-only", "--quiet"]) == DONE
    tables = {name: pd.read_csv(folder / "run" / f"{name}.csv") for name in ("patients", "attainment", "comparison")}
    kept = []
    simulate(read_study(path), sink=kept.append)
    people = SimpleNamespace(**{name: column.to_numpy() for name, column in tables["patients"].items()})
    assert len(people.age) == 300

    def luck(name):
        return np.concatenate([
            normals(SEED, f"spread {name}", rows.patients.block)[rows.patients.slots] for rows in kept])  # fmt: skip

    individual, found = asked.model(people, luck), {}
    for name, rate in asked.given.items():
        site = effect_site(individual, lambda minute, rate=rate: rate(people, minute), 60)
        course = asked.quantity(individual, site)[:, round(asked.start / STEP_MIN) :]
        found[name] = shares(course, asked.low, asked.high)
    told = {name: [np.concatenate([getattr(rows.judged[0, p, 0], what) for rows in kept])
                   for what in ("below", "inside", "above", "attained")]
            for p, name in enumerate(asked.given)}  # fmt: skip
    return SimpleNamespace(asked=asked, tables=tables, people=people, found=found, told=told)


def test_body_size_is_as_typed_anew(audit):
    for name, here in {"lean_body_mass_james": james, "adjusted_body_weight": adjusted_weight,
                       "fat_free_mass_al_sallami":
                       lambda p: fat_free(p.sex == "male", p.age, p.weight, p.height / 100)}.items():  # fmt: skip
        if name in audit.tables["patients"]:
            np.testing.assert_allclose(audit.tables["patients"][name], here(audit.people), rtol=1e-12)


def test_every_patients_time_and_attainment(audit):
    for name, shares_found in audit.found.items():
        *shares_told, attained = audit.told[name]
        for here, theirs in zip(shares_found, shares_told, strict=True):
            assert np.abs(here - theirs).max() < 2e-4
        sure = np.abs(shares_found[1] - 0.8) > 2e-4  # else the grid cannot tell
        assert sure.mean() > 0.98
        assert np.array_equal((shares_found[1] >= 0.8)[sure], attained[sure])


def test_tables_by_group(audit):
    for row in audit.tables["attainment"].itertuples():
        chosen = audit.asked.groups[row.group](audit.people)
        below, inside, above = (share[chosen] for share in audit.found[row.protocol])
        unsure = np.sum(np.abs(inside - 0.8) <= 2e-4)
        assert row.patients == chosen.sum() > 0 and row.failed == 0
        assert abs(row.attained * row.patients - np.sum(inside >= 0.8)) <= unsure + 1e-9
        for here, theirs in ((below, row.time_below), (inside, row.time_in_range), (above, row.time_above)):
            assert abs(here.mean() - theirs) < 1e-3
        assert row.time_in_range_error == pytest.approx(inside.std(ddof=1) / len(inside) ** 0.5, rel=1e-2)
    assert set(audit.tables["attainment"]["group"]) == set(audit.asked.groups)


def test_paired_differences(audit):
    a, b = (share[1] >= 0.8 for share in audit.found.values())
    rows = audit.tables["comparison"]
    assert len(rows) == len(audit.asked.groups)
    for row in rows.itertuples():
        chosen = audit.asked.groups[row.group](audit.people)
        told = np.array([row.difference, row.difference_low, row.difference_high])
        unsure = sum(np.sum(np.abs(share[1][chosen] - 0.8) <= 2e-4) for share in audit.found.values())
        assert np.abs(told - newcombe(a[chosen], b[chosen])).max() <= 1e-7 + 1.5 * unsure / chosen.sum()
