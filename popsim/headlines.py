"""Titles of pictures: what the rows of one model and one target say, in one line."""

from __future__ import annotations

import pandas as pd

from popsim.estimate import MOST_FAILED_PERCENT, no_headline
from popsim.finished import FinishedRun
from popsim.study_records import Target
from popsim.words import percent, window

NO_HEADLINE = f"No headline: more than {MOST_FAILED_PERCENT} % could not be simulated or went without a dose"


def rows_where(table: pd.DataFrame, **equal: str) -> pd.DataFrame:
    """The rows whose columns hold these values."""
    wanted = pd.Series(True, index=table.index)
    for column, value in equal.items():
        wanted &= table[column] == value
    return table[wanted]


def has_headline(row: pd.Series) -> bool:
    """Whether a row of attainment.csv may be shown as a result: there are patients, and at most 1 % of them failed."""
    return bool(row.patients > 0 and not no_headline(row.failed, row.patients))


def attainment_headline(run: FinishedRun, comparison: pd.DataFrame, attainment: pd.DataFrame) -> str:
    """A picture's title: what the rows of one model and one target say."""
    everyone = rows_where(attainment, group="all")
    if not all(has_headline(row) for row in everyone.itertuples()):
        return NO_HEADLINE
    if len(run.protocols) == 1:
        shares = [row.attained for row in attainment.itertuples() if has_headline(row)]
        by_group = f"; by group {percent(min(shares))} to {percent(max(shares))} %" if len(shares) > 1 else ""
        return f"{percent(everyone.iloc[0].attained)} % of all patients attain the target{by_group}"
    if len(run.protocols) == 2:
        return _pair_headline(comparison, attainment)
    best = everyone.loc[everyone["attained"].idxmax()]
    unclear = [pair.protocol_b if pair.protocol_a == best.protocol else pair.protocol_a
               for pair in rows_where(comparison, group="all").itertuples()
               if best.protocol in (pair.protocol_a, pair.protocol_b) and spans_zero(pair)]
    but = f"; no clear difference to {_listed(unclear, 'protocols')}" if unclear else ""
    return f'Of all patients most are on target with "{best.protocol}": {percent(best.attained)} %{but}'


def _pair_headline(comparison: pd.DataFrame, attainment: pd.DataFrame) -> str:
    shown = {group for group, rows in attainment.groupby("group")
             if all(has_headline(row) for row in rows.itertuples())}
    pairs = [pair for pair in comparison.itertuples() if pair.group in shown]
    whole = next(pair for pair in pairs if pair.group == "all")
    names = f'between "{whole.protocol_a}" and "{whole.protocol_b}"'
    if all(spans_zero(pair) for pair in pairs):
        return f"No clear difference {names}" + (" in any group" if len(pairs) > 1 else "")
    if spans_zero(whole):
        rest = [f'{abs(100 * pair.difference):.1f} points more with "{_winner(pair)}" in "{pair.group}"'
                for pair in pairs if not spans_zero(pair)]
        said = "; ".join(rest) if len(rest) < 3 else f"differences in {len(rest)} groups"
        return f"No clear difference {names} among all patients; {said}"
    loser = whole.protocol_a if _winner(whole) == whole.protocol_b else whole.protocol_b
    title = f'{abs(100 * whole.difference):.1f} points more on target with "{_winner(whole)}" than with "{loser}"'
    unclear = [pair.group for pair in pairs if spans_zero(pair)]
    against = [pair.group for pair in pairs if not spans_zero(pair) and _winner(pair) != _winner(whole)]
    if not unclear and not against and len(pairs) > 1:
        sizes = [abs(100 * pair.difference) for pair in pairs if pair.group != "all"]
        title += f"; by group {min(sizes):.1f} to {max(sizes):.1f}" if len(sizes) > 1 else ""
    title += f"; no clear difference in {_listed(unclear, 'groups')}" if unclear else ""
    title += f"; fewer in {_listed(against, 'groups')}" if against else ""
    small = all(pair.verdict == "too small to matter" for pair in pairs)
    return title + ("; too small to matter" if small else "")


def _winner(pair) -> str:
    return pair.protocol_b if pair.difference > 0 else pair.protocol_a


def spans_zero(pair) -> bool:
    """Whether a difference's interval holds zero: no clear difference."""
    return bool(pair.difference_low <= 0 <= pair.difference_high)


def _listed(names: list[str], what: str) -> str:
    return " and ".join(f'"{name}"' for name in names) if len(names) < 3 else f"{len(names)} {what}"


def range_headline(run: FinishedRun, comparison: pd.DataFrame, attainment: pd.DataFrame, target: Target) -> str:
    """A title for the course of the share in range: how much of the window all patients spend in range on average."""
    everyone = rows_where(attainment, group="all")
    if not all(has_headline(row) for row in everyone.itertuples()):
        return NO_HEADLINE
    if len(run.protocols) > 3:
        everyone = everyone.loc[[everyone["time_in_range"].idxmin(), everyone["time_in_range"].idxmax()]]
    joined = " to " if len(run.protocols) > 3 else ", "
    several = len(run.protocols) > 1
    shares = joined.join(f"{percent(row.time_in_range)} %" + (f' with "{row.protocol}"' if several else "")
                         for row in everyone.itertuples())
    title = f"{'In range' if target.instant else 'Mean time in range,'} {window(target)}: {shares}"
    pairs = rows_where(comparison, group="all")
    unclear = len(pairs) == 1 and spans_zero(pairs.iloc[0])
    return title + ("; no clear difference in attainment" if unclear else "")


def sides_headline(attainment: pd.DataFrame, target: Target) -> str:
    """A title for who is on which side: mean share of the window below and above, of all patients."""
    everyone = rows_where(attainment, group="all")
    if not all(has_headline(row) for row in everyone.itertuples()):
        return NO_HEADLINE
    lead = f"Out of range {window(target)}, on average"
    if len(everyone) > 3:
        below, above = ([percent(end) for end in (side.min(), side.max())]
                        for side in (everyone["time_below"], everyone["time_above"]))
        return f"{lead}: {' to '.join(below)} % below and {' to '.join(above)} % above, by protocol"
    shares = "; ".join(f"{percent(row.time_below)} % below and {percent(row.time_above)} % above"
                       + (f' with "{row.protocol}"' if len(everyone) > 1 else "") for row in everyone.itertuples())
    return f"{lead}: {shares}"
