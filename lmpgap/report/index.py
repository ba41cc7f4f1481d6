"""The index page over the weeks reported so far, with trends per hub and per account.

Each week has a small file of its own under ``weeks/`` beside the index, replaced in one step when the week is
written again. The page is made from whatever files are there; a writer that finds, after writing the page, that the
files changed meanwhile makes it once more. So two reports written at once both end up in it, without locks.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from urllib.parse import quote

from lmpgap.errors import DataError, Fault
from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.files import write_atomically
from lmpgap.report.text import money, number, percent, plain
from lmpgap.report.view.model import PairView, WeeklyView

FORMAT = 1
_ATTEMPTS = 20


@dataclass(frozen=True, kw_only=True)
class WeekRecord:
    """Headline figures of one written week.

    Attributes
    ----------
    key
        Names the week: region and first interval; a week written again has the same key.
    title, span, currency, first_interval
        What the row says, and the UTC start by which weeks are ordered.
    report
        Path of the report relative to the index page, with forward slashes.
    base, against
        The main pair.
    mean_absolute, largest
        Of the main pair [currency/MWh]; ``None`` where there is none.
    where
        Bus and hour of the largest difference.
    usable
        Share of solves with a usable verdict [-]; ``None`` without certificates.
    hubs, hub_prices
        Mean difference of the main pair, and mean price of ``against``, at each hub [currency/MWh].
    accounts
        Loss component at stake by account [currency].
    sentence
        First sentence of the summary.
    """

    key: str
    title: str
    span: str
    currency: str
    first_interval: str
    report: str
    base: str
    against: str
    mean_absolute: float | None
    largest: float | None
    where: str
    usable: float | None
    hubs: dict[str, float]
    hub_prices: dict[str, float]
    accounts: dict[str, float]
    sentence: str


@dataclass(frozen=True, kw_only=True)
class Trend:
    """One line of the index: a hub or an account over the weeks.

    Attributes
    ----------
    name
    latest, change
        Latest figure, and its change from the week before, as text.
    points : (n_week,)
        Position from 0 to 1 in both directions for the small line; ``None`` where a week has no figure.
    zero
        Height of the zero line, 0 to 1.
    words
        The figures in words.
    """

    name: str
    latest: str
    change: str
    points: tuple[tuple[float, float] | None, ...]
    zero: float
    words: str

    @property
    def lines(self) -> tuple[str, ...]:
        """Coordinates for unbroken runs of points, in a 160 x 36 picture with a margin of 4."""
        runs: list[list[str]] = [[]]
        for point in self.points:
            if point is None:
                runs.append([])
            else:
                runs[-1].append(f"{4 + 152 * point[0]:.1f},{32 - 28 * point[1]:.1f}")
        return tuple(" ".join(run) for run in runs if run)

    @property
    def zero_y(self) -> str:
        """Height of the zero line in that picture."""
        return f"{32 - 28 * self.zero:.1f}"

    @property
    def end(self) -> tuple[str, str]:
        """Last point in that picture."""
        x, y = next((point for point in reversed(self.points) if point is not None), (1.0, self.zero))
        return f"{4 + 152 * x:.1f}", f"{32 - 28 * y:.1f}"


def week_record(view: WeeklyView, report: str) -> WeekRecord:
    """Return the headline figures of a week; ``report`` is its path relative to the index page."""
    main = view.main
    first = view.hours.starts[0].isoformat()
    digest = hashlib.sha256(f"{view.title}\n{first}".encode()).hexdigest()[:8]
    slug = re.sub(r"[^a-z0-9]+", "-", view.title.lower()).strip("-")[:40]
    counted = sum(int((code >= 0).sum()) for code in view.trust.code.values())
    usable = sum(
        int((code == position).sum())
        for code in view.trust.code.values()
        for position, word in enumerate(view.trust.words)
        if word in USABLE_VERDICTS
    )
    means = view.hubs.means
    names = view.hubs.hubs.name
    difference = means[main.against]["lmp"] - means[main.base]["lmp"]
    return WeekRecord(
        key=f"{first[:10]}-{slug or 'week'}-{digest}",
        title=plain(view.title),
        span=view.hours.span,
        currency=view.currency,
        first_interval=first,
        report=report,
        base=main.base,
        against=main.against,
        mean_absolute=_finite(main.mean_absolute),
        largest=_finite(main.largest),
        where=_where(view, main),
        usable=usable / counted if counted else None,
        hubs={plain(hub): float(gap) for hub, gap in zip(names, difference, strict=True) if math.isfinite(gap)},
        hub_prices={
            plain(hub): float(price)
            for hub, price in zip(names, means[main.against]["lmp"], strict=True)
            if math.isfinite(price)
        },
        accounts={plain(total.account): total.amount for total in view.accounts if math.isfinite(total.amount)},
        sentence=plain(view.sentences[0]),
    )


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _where(view: WeeklyView, pair: PairView) -> str:
    if pair.worst_bus < 0:
        return ""
    return f"{plain(view.nodes.name[pair.worst_bus])}, {view.hours.label[pair.worst_hour]}"


def update_index(reports_folder: Path | str, view: WeeklyView, path: Path | str) -> Path:
    """Add or replace a week in the index page of a folder of reports, and return the page's path.

    Parameters
    ----------
    reports_folder
        Folder of ``index.html``.
    view
        The week's view model.
    path
        The week's report; the index links to it.

    Raises
    ------
    DataError
        The folder cannot be written, or a week's file in it cannot be read.
    """
    folder = Path(reports_folder)
    try:
        relative = Path(os.path.relpath(Path(path).resolve(), folder.resolve())).as_posix()
    except ValueError:  # another drive
        relative = Path(path).resolve().as_uri()
    record = week_record(view, relative)
    text = json.dumps({"format": FORMAT, **asdict(record)}, ensure_ascii=False, indent=1, allow_nan=False)
    write_atomically(folder / "weeks" / f"{record.key}.json", text + "\n")
    page = folder / "index.html"
    for _ in range(_ATTEMPTS):
        seen = _listing(folder)
        write_atomically(page, index_html(read_weeks(folder)))
        if _listing(folder) == seen:
            break
    return page


def _listing(folder: Path) -> list[tuple[str, int, int]]:
    """Return name, size and time of every week's file: what the page was made from."""
    entries = []
    for file in sorted((folder / "weeks").glob("*.json")):
        try:
            state = file.stat()
        except FileNotFoundError:
            continue
        entries.append((file.name, state.st_size, state.st_mtime_ns))
    return entries


def read_weeks(reports_folder: Path | str) -> list[WeekRecord]:
    """Return the weeks of a folder, latest first.

    Raises
    ------
    DataError
        Week files that cannot be read, all of them at once.
    """
    records, faults = [], []
    for file in sorted((Path(reports_folder) / "weeks").glob("*.json")):
        try:
            content = json.loads(file.read_text(encoding="utf-8"))
            if not isinstance(content, dict) or content.pop("format", None) != FORMAT:
                raise ValueError(f"not a week of format {FORMAT}")
            records.append(WeekRecord(**content))
        except FileNotFoundError:
            continue
        except (OSError, ValueError, TypeError) as error:
            faults.append(
                Fault(
                    table=str(file),
                    message=f"cannot be read: {error}",
                    allowed="delete it and write its week again, or restore it",
                )
            )
    if faults:
        raise DataError("The index of reports cannot be made.", faults)
    return sorted(records, key=lambda record: (record.first_interval, record.key), reverse=True)


def index_html(weeks: Sequence[WeekRecord]) -> str:
    """Return the index page for weeks in the order latest first."""
    from lmpgap.report.render import environment, resource

    oldest_first = list(reversed(weeks))
    currencies = {week.currency for week in weeks}
    currency = currencies.pop() if len(currencies) == 1 else "own currency"
    return (
        environment()
        .get_template("index.html.j2")
        .render(
            weeks=weeks,
            links=[quote(week.report, safe="/:.-_~%") for week in weeks],
            rows=_rows(weeks),
            currency=currency,
            hub_trends=_trends([week.hubs for week in oldest_first], 2),
            account_trends=_trends([week.accounts for week in oldest_first], 0),
            style=resource("report.css"),
            index_style=resource("index.css"),
        )
    )


def _rows(weeks: Sequence[WeekRecord]) -> list[tuple[str, ...]]:
    return [
        (
            f"{week.against} less {week.base}",
            "" if week.mean_absolute is None else number(week.mean_absolute),
            "" if week.largest is None else number(week.largest, signed=True),
            week.where,
            money(sum(abs(amount) for amount in week.accounts.values()), week.currency) if week.accounts else "",
            "" if week.usable is None else percent(week.usable),
        )
        for week in weeks
    ]


def _trends(series: Sequence[dict[str, float]], decimals: int) -> list[Trend]:
    """Return one trend per name, oldest week first, the largest latest figure first."""
    names = sorted({name for week in series for name in week})
    trends = []
    for name in names:
        values = [week.get(name) for week in series]
        known = [value for value in values if value is not None]
        low, high = min(0.0, *known), max(0.0, *known)
        span = high - low or 1.0
        steps = max(len(values) - 1, 1)
        points = tuple(
            None if value is None else (place / steps if len(values) > 1 else 0.5, (value - low) / span)
            for place, value in enumerate(values)
        )
        latest = known[-1]
        trends.append(
            (
                -abs(latest),
                Trend(
                    name=name,
                    latest=number(latest, decimals, signed=True),
                    change=number(latest - known[-2], decimals, signed=True) if len(known) > 1 else "",
                    points=points,
                    zero=-low / span,
                    words=", ".join(number(value, decimals, signed=True) for value in known),
                ),
            )
        )
    return [trend for _, trend in sorted(trends, key=lambda entry: (entry[0], entry[1].name))]
