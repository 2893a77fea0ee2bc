"""One good study file, and the many ways to spoil it, each with where, what and which advice a user must be told."""

GOOD = '''
title = "A card"
question = "Is it good?"
seed = 7

[population]
source = "survey"
count = 1000
age = "20 to 90 years"

[population.set]
opioid = true
venous_sampling = false

[[group]]
name = "old"
where = "age >= 65"

[drug]
model = "propofol_eleveld_2018"

[[protocol]]
name = "card"
by = "adjusted_body_weight"
strength = "10 mg/mL"
[[protocol.dose]]
amount = "1.5 mg/kg"
over = "30 s"
at_most = "0.2 g"
[[protocol.dose]]
at = "1 min"
rate = "6 mg/kg/h"
until = "1 h"

[target]
quantity = "effect_site"
range = "2 to 4 ug/mL"
during = "5 min to 60 min"
attained_when = "80 % of the time"

[compare]
matters = "5 %"

[run]
until = "90 min"
every = "30 s"
'''
AMOUNT, RATE, UNTIL = 'amount = "1.5 mg/kg"', 'rate = "6 mg/kg/h"', 'until = "1 h"\n'
OVER, LAST = 'over = "30 s"\n', 'at_most = "0.2 g"\n'
MODEL, RANGE, DURING = 'model = "propofol_eleveld_2018"', 'range = "2 to 4 ug/mL"', 'during = "5 min to 60 min"'
WHERE, RULE, SEED, COUNT = 'where = "age >= 65"', 'attained_when = "80 % of the time"', "seed = 7", "count = 1000"
BANDS = '''[[protocol.dose.band]]
where = "age < 60"
amount = "5 mg"
[[protocol.dose.band]]
where = "age >= 60"
'''

BAD = [
    # quantities
    ([(AMOUNT, "amount = 1.5")], "protocol 1, dose 1: amount", '"1.5" has no unit', 'write "1.5 mg"'),
    ([(AMOUNT, 'amount = "1.5"')], "protocol 1, dose 1: amount", "has no unit", "an amount per kg"),
    ([(AMOUNT, 'amount = "1.5 mg/kg/h"')], "protocol 1, dose 1: amount", "is a rate per kg", "an amount per kg"),
    ([(RATE, 'rate = "6 mg/kg"')], "protocol 1, dose 2: rate", "is an amount per kg", "a rate per kg"),
    ([(AMOUNT, 'amount = "-1 mg"')], "dose 1: amount", "negative", "zero or more"),
    ([(AMOUNT, 'amount = "0 mg"')], "dose 1: amount", '"0 mg"', "above zero"),
    ([(AMOUNT, "amount = nan")], "dose 1: amount", "not finite", "a finite number"),
    ([(AMOUNT, "amount = inf")], "dose 1: amount", "not finite", "a finite number"),
    ([(AMOUNT, 'amount = "1e200 mg"')], "dose 1: amount", "1e200 mg", "check the number and its unit"),
    ([(AMOUNT, 'amount = "1,5 mg/kg"')], "dose 1: amount", "1,5 mg/kg", "decimal point"),
    ([(AMOUNT, "amount = true")], "dose 1: amount", "true", "an amount"),
    ([(AMOUNT, "amount = [1]")], "dose 1: amount", "a list", "an amount"),
    ([(AMOUNT, "amount = {mg = 1}")], "dose 1: amount", "a section", "an amount"),
    ([(AMOUNT, "amount = 2026-12-01")], "dose 1: amount", "2026-12-01", "an amount"),
    ([(AMOUNT, 'amount = "1.5 mg per kg"')], "dose 1: amount", "unknown unit", "an amount per kg"),
    ([('strength = "10 mg/mL"', 'strength = "0 mg/mL"')], "protocol 1: strength", '"0 mg/mL"', "above zero"),
    ([('strength = "10 mg/mL"', 'vial = "20 mL"')], "protocol 1: vial", "20 mL", "strength"),
    ([('age = "20 to 90 years"', "age = 20")], "population: age", '"20"', ">= 65 years"),
    ([('age = "20 to 90 years"', 'age = "5 to 90 years"')], "population: age", "from 5 to 90 years",
     'source = "described"'),
    ([('age = "20 to 90 years"', 'age = "90 to 20 years"')], "population: age", "90 to 20", "a lower end below"),
    ([("matters = \"5 %\"", 'matters = "500 %"')], "compare: matters", "500 %", "up to 100 %"),
    # keys and sections
    ([(AMOUNT, 'amont = "1.5 mg/kg"')], "protocol 1, dose 1: amont", 'unknown key "amont"', 'did you mean "amount"?'),
    ([("[run]", "[running]")], "study.toml: run", "missing", "a [run] section"),
    ([("count", "cuont")], "population: cuont", "unknown key", 'did you mean "count"?'),
    ([(SEED, "")], "study.toml: seed", "missing", "seed = 20261201"),
    ([(RANGE, "")], "target: range", "nothing", "or low and/or high"),
    ([(COUNT, "")], "population: count", "missing", "count = 10000"),
    ([("[population]", "[[population]]")], "study.toml: population", "double brackets", "[population]"),
    ([("[[protocol]]", "[protocol]")], "study.toml: protocol", "single brackets", "[[protocol]]"),
    ([("[[protocol.dose]]", "[protocol.dose]"), ("[[protocol.dose]]", "[[protocol]]")], "protocol 1: dose",
     "single brackets", "[[protocol.dose]]"),
    ([("[[group]]", "[group]")], "study.toml: group", "single brackets", "[[group]]"),
    ([(SEED, 'seed = 7\ntarget = "x"'), ("[target]", "[target.a]")], "study.toml", "not valid TOML", ""),
    ([(SEED, 'seed = 7\ncompare = 3'), ("[compare]\nmatters = \"5 %\"", "")], "study.toml: compare", "3", "[compare]"),
    # numbers, switches, texts
    ([(COUNT, 'count = "1000"')], "population: count", '"1000"', "a whole number from 1 to 100,000,000"),
    ([(COUNT, "count = true")], "population: count", "true", "a whole number"),
    ([(COUNT, "count = 1e4")], "population: count", "10000.0", "a whole number"),
    ([(COUNT, "count = 1000000000")], "population: count", "1000000000", "100,000,000"),
    ([(SEED, "seed = -1")], "study.toml: seed", "-1", "a whole number from 0"),
    ([(SEED, "seed = " + "9" * 5000)], "study.toml", "not valid TOML", ""),
    ([("opioid = true", 'opioid = "yes"')], "population, set: opioid", '"yes"', "without quotes"),
    ([("opioid = true", "opioid = 1")], "population: set", "opioid is a number", "true or false"),
    ([("opioid = true", "opioid = nan")], "population, set: opioid", "nan", "true, false or a number"),
    ([("opioid = true\n", "")], "population: set", "opioid is missing", "opioid = true"),
    ([("[run]", '[variability]\nscale = "1"\n[run]')], "variability: scale", '"1"', "a number from 0 to 10"),
    ([("[run]", "[variability]\nscale = true\n[run]")], "variability: scale", "true", "a number from 0 to 10"),
    ([("[run]", '[variability]\nbetween_subject = "no"\n[run]')],
     "variability: between_subject", '"no"', "true or false"),
    ([("[run]", '[variability]\nbetween_subject = 1\n[run]')], "variability: between_subject", "1", "true or false"),
    ([('title = "A card"', 'title = ""')], "study.toml: title", "an empty text", "some text"),
    ([('title = "A card"', f'title = "{"x" * 81}"')], "study.toml: title", "81 characters", "at most 80"),
    ([('name = "old"', 'name = "o\\nd"')], "group 1: name", '"o?d"', "on one line"),
    ([('name = "old"', "name = 3")], "group 1: name", "3", "text in double quotes"),
    ([("[population.set]", "[population.set]\n\"a b\" = 1")], "population: set", '"a b"', "letters, digits and _"),
    ([("[population.set]", "[population.set]\nmin = 1")], "population: set", '"min"', "no function has"),
    ([("[population.set]", "[population.set]\nweight = 70")], "population: set", '"weight"', "limits"),
    ([("[population.set]", "[population.scale]\nheigth = 1.1\n[population.set]")],
     "population: scale", "heigth", "height"),
    ([("[population.set]", '[population.scale]\nweight = "1.1"\n[population.set]')],
     "population, scale: weight", '"1.1"',
     "without quotes"),
    # names of things
    ([(MODEL, 'model = "porpofol_eleveld_2018"')],
     "drug: model", "no such sheet", 'did you mean "propofol_eleveld_2018"?'),
    ([(MODEL, 'model = "mine.toml"')], "mine.toml", "cannot be opened", "a model sheet"),
    ([(MODEL, MODEL + '\nrepeat_with = "x"')], "drug: repeat_with", '"x"', "a list of names"),
    ([(MODEL, MODEL + '\nrepeat_with = ["remifentanil_minto_1997"]')], "drug: repeat_with", "a model of remifentanil",
     "other models of propofol"),
    ([(MODEL, MODEL + '\nrepeat_with = ["propofol_eleveld_2018"]')], "drug: model", "twice", "each name once"),
    ([('name = "old"', 'name = "all"')], "group 1: name", '"all"', "always there"),
    ([(WHERE, WHERE + '\n[[group]]\nname = "old"\nwhere = "age > 80"')], "study.toml: group", '"old" twice', "once"),
    ([("[target]", '[[protocol]]\nname = "card"\n[[protocol.dose]]\namount = "5 mg"\n[target]')],
     "study.toml: protocol",
     '"card" twice', "once"),
    ([("[compare]", '[compare]\nreference = "odl"')], "compare: reference", '"odl"', 'did you mean "old"?'),
    ([(WHERE, 'where = "aeg >= 65"')], "group 1: where", '"aeg"', 'did you mean "age"?'),
    ([(WHERE, 'where = "lean_body_mass > 50"')], "group 1: where", "lean_body_mass", "say which: lean_body_mass_boer"),
    ([(WHERE, 'where = "age"')], "group 1: where", "age", '"age > 0"'),
    ([(WHERE, 'where = "age + 1"')], "group 1: where", "is a number", "a condition"),
    ([(WHERE, 'where = "opioid > 3"')], "group 1: where", "opioid", '"not opioid"'),
    ([(WHERE, "where = 65")], "group 1: where", "65", "a condition as text"),
    ([(COUNT, COUNT + '\nwhere = "wieght < 90"')], "population: where", "wieght", 'did you mean "weight"?'),
    ([(COUNT, COUNT + '\nfile = "people.csv"')], "population: file", 'source = "survey"', 'source = "list"'),
    ([('source = "survey"', 'source = "list"')], "population: file", "missing", 'file = "people.csv"'),
    ([('source = "survey"', 'source = "list"\nfile = "none.csv"')], "none.csv", "No such file", "a CSV file"),
    ([('source = "survey"', 'source = "lattice"')], "population: lattice", "missing", "[population.lattice]"),
    ([('source = "survey"', 'source = "survy"')], "population: source", "survy", 'did you mean "survey"?'),
    # scaling
    ([("adjusted_body_weight", "adjusted_weight")],
     "protocol 1: by", "adjusted_weight", 'did you mean "adjusted_body_weight"?'),
    ([(RATE, RATE + '\nby = "age"')], "protocol 1, dose 2: by", "in years", "a covariate in kg"),
    ([(RATE, RATE + '\nby = "sex"')], "protocol 1, dose 2: by", "no size", "a covariate in kg"),
    ([(RATE, RATE + '\nby = "opioid"')], "protocol 1, dose 2: by", "no size", "a covariate in kg"),
    ([(RATE, 'rate = "6 mg/m2/h"'), ('by = "adjusted_body_weight"\n', "")], "protocol 1, dose 2: by", "missing",
     "body_surface_area_mosteller"),
    ([(RATE, 'rate = "6 mg/m2/h"')], "protocol 1, dose 2: by", "in kg", "a covariate in m2"),
    ([(AMOUNT, 'amount = "5 mg/m2"\nrate = "6 mg/kg/h"'), (OVER, "")],
     "dose 1: amount", "both per kg and per m2", "one"),
    # limits
    ([('at_most = "0.2 g"', 'at_most = "100 mg"\nat_least = "120 mg"')],
     "dose 1: at_most", "below the floor", "at or above"),
    ([('at_most = "0.2 g"', 'at_most = "100 mg/h"')], "dose 1: at_most", "100 mg/h", "200 mg"),
    ([('at_most = "0.2 g"', 'at_most = "0 mg"')], "dose 1: at_most", "0 mg", "above zero"),
    ([('at_most = "0.2 g"', 'round_to = "0 mg"')], "dose 1: round_to", "0 mg", "above zero"),
    ([('at_most = "0.2 g"', 'round_to = "1 mg/kg"')], "dose 1: round_to", "an amount per kg", "200 mg"),
    ([(UNTIL, UNTIL + 'at_most = "100 mg"\n')], "dose 2: at_most", "100 mg", "100 mg/h"),
    # times
    ([(AMOUNT, "")], "dose 1: amount", "neither amount nor rate", "rate ="),
    ([(UNTIL, "")], "dose 2: rate", "without an end", "over ="),
    ([(UNTIL, UNTIL + 'over = "5 min"\n')], "dose 2: until", "1 h", "not both"),
    ([(UNTIL, UNTIL + 'every = "5 min"\n')], "dose 2: over", "missing", "how long each one runs"),
    ([(OVER, 'until = "5 min"\n')], "dose 1: until", "5 min", "over ="),
    ([(OVER, OVER + 'rate = "5 mg/min"\n')], "dose 1: over", "30 s", "the duration follows"),
    ([(OVER, 'over = "0 s"\n')], "dose 1: over", "0 s", "for a bolus"),
    ([(OVER, "times = 3\n")], "dose 1: times", "3", "every ="),
    ([(OVER, 'every = "5 min"\ntimes = 3\nuntil = "9 min"\n')], "dose 1: until", "9 min", "times or until, not both"),
    ([(OVER, 'every = "5 min"\ntimes = 0\n')], "dose 1: times", "0", "from 1 to 1,000"),
    ([(OVER, 'every = "5 min"\ntimes = 5000\n')], "dose 1: times", "5000", "from 1 to 1,000"),
    ([(OVER, 'every = "0 min"\n')], "dose 1: every", "0 min", "above zero"),
    ([(OVER, 'every = "0.001 min"\n')], "dose 1: every", "about 90,000 administrations", "at most 1,000 in one step"),
    ([('at = "1 min"', 'at = "60 min"')], "dose 2: until", "1 h", "after the step's start"),
    ([('at = "1 min"', 'at = "91 min"'), (UNTIL, 'over = "1 min"\n')], "dose 2: at", "after the run's end", "lengthen"),
    ([(OVER, OVER + 'route = "oral"\n')], "dose 1: route", "oral", "swallowed at once"),
    ([(LAST, BANDS + 'rate = "5 mg/h"\n'), (AMOUNT, ""), (OVER, "")],
     "dose 1: band", "amounts in some bands and rates", "two steps"),
    ([(LAST, BANDS + 'every = "5 min"\namount = "5 mg"\n'), (OVER, 'until = "30 min"\n')],
     "dose 1: band", "some bands repeat", "two steps"),
    # targets
    ([("effect_site", "efect_site")], "target: quantity", "efect_site", 'did you mean "effect_site"?'),
    ([("effect_site", "peak")], "target: attained_when", "of the time", "one value in range or not"),
    ([("effect_site", "effect"), (MODEL, 'model = "propofol_schnider_1998"')],
     "target: quantity", "describes no effect",
     "propofol_eleveld_2018"),
    ([("effect_site", "effect")], "target: range", "is a concentration", "a number without unit"),
    ([(RANGE, 'range = "2 to 4"')], "target: range", "has no unit", "a concentration"),
    ([(RANGE, "range = 2")], "target: range", "2", "text in double quotes"),
    ([(RANGE, "low = 2")], "target: low", "has no unit", 'write "2 ug/mL"'),
    ([(RANGE, "low = true")], "target: low", "true", "a limit"),
    ([(RANGE, RANGE + '\nlow = "1 ug/mL"')], "target: range", "range and low", "low and/or high"),
    ([(RANGE, 'low = "4 ug/mL"\nhigh = "2 ug/mL"')], "target: high", "not above low", "low below high"),
    ([(DURING, 'during = "5 min to 2 h"')], "target: during", "past the run's end", "lengthen"),
    ([(DURING, 'during = "60 min to 5 min"')], "target: during", "60 min to 5 min", "below the upper"),
    ([(DURING, 'during = "5 to 60"')], "target: during", "has no unit", "a time"),
    ([(DURING, "during = 60")], "target: during", "60", "text in double quotes"),
    ([(DURING, 'during = "5 min to closure_min"')], "target: during", "closure_min", "[population.set]"),
    ([(DURING, 'during = "5 min to done_min"'), ("[population.set]", "[population.set]\ndone_min = true")],
     "target: during", "done_min", "a numeric attribute"),
    ([(DURING, 'during = "5 min to end_h"'), ("[population.set]", "[population.set]\nend_h = 2")],
     "target: during", "5 min to 120 min", "within the run (90 min)"),
    ([(DURING, 'during = "end_min to 50 min"'), ("[population.set]", "[population.set]\nend_min = 60")],
     "target: during", "60 min to 50 min", "from start to end"),
    ([(DURING, 'during = "steady state"')], "target: during", "nothing in \"card\" repeats", "a step with every"),
    ([(RULE, 'attained_when = "mostly"')], "target: attained_when", "mostly", "80 % of the time"),
    ([(RULE, 'attained_when = "120 % of the time"')], "target: attained_when", "120 %", "at any time"),
    ([(RULE, "attained_when = 80")], "target: attained_when", "80", "text in double quotes"),
    ([(RULE, "")], "target: attained_when", "missing", "80 % of the time"),
    # variability
    ([(MODEL, 'model = "propofol_marsh_1991"')],
     "study.toml: variability", "publishes no between-subject", "propofol_schnider_1998"),
    ([("[run]", '[variability]\nfrom = "propofol_marsh_1991"\n[run]')],
     "variability: from", "publishes none itself", "a sheet"),
    ([("[run]", '[variability]\nfrom = "remifentanil_minto_1997"\n[run]')],
     "variability: from", "a model of remifentanil",
     "a model of propofol"),
    ([("[run]", '[variability]\nfrom = "propofol_schnider_1998"\nbetween_subject = false\n[run]')], "variability: from",
     "between_subject = false", "one of the two"),
    ([("[run]", '[variability]\nfrom = "nobody"\n[run]')],
     "variability: from", "no such sheet", "propofol_eleveld_2018"),
    # the run
    ([('until = "90 min"', 'until = "0 min"')], "run: until", "0 min", "above zero"),
    ([('every = "30 s"', 'every = "0 s"')], "run: every", "0 min", "above zero"),
    ([('every = "30 s"', 'every = "0.001 s"')], "run: every", "times in the tables", "a longer step"),
]  # fmt: skip
