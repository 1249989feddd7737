"""The printable page of a book: its measures, how they are shared, how sure they are and where they come from."""

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from html import escape
from itertools import count

from service.representations.charts import (
    NARROW,
    Look,
    contributions_chart,
    distribution_chart,
    enlarged,
    exceedance_chart,
    marks_of,
)
from service.representations.page import BookHead, Cell, book_path, link, more_of, name, page, table
from service.representations.report_words import CAUTIONS, RULES, measure_meaning, sampling_error
from service.representations.shapes import (
    Allocation,
    AllocationsAnswer,
    Distribution,
    Figure,
    GroupPart,
    Measure,
    SubPortfolioPart,
    Tail,
    WorstScenario,
)
from service.representations.sums import share_of_all, sum_alone, sum_profit
from service.representations.wording import (
    Amounts,
    group_words,
    level_words,
    measure_words,
    percent,
    probability,
    rule_words,
    sentence,
)

MOST_ROWS = 200  # of a table; the data forms have all
LARGEST_PARTS = 3  # named of a worst scenario
MOST_LINKED = 5  # parts that a link makes larger
FEW_SCENARIOS = 30  # below which even an error of sampling is a guess

Part = SubPortfolioPart | GroupPart


def report_page(
    book: BookHead,
    answer: AllocationsAnswer,
    distribution: Distribution,
    measures: Sequence[Measure],
    *,
    query: str = "",
    root: str = "",
) -> str:
    """Return the page of one book and the measures asked for.

    It fetches nothing, runs nothing and fits a telephone, a desk and A4 paper. It rounds and says so, with
    links to the same answer unrounded.

    Parameters
    ----------
    book : BookHead
    answer : AllocationsAnswer
    distribution : Distribution
        Of the total, showing at least the places of the marks of `measures`.
    measures : sequence of Measure
        As asked for.
    query : str
        The query of the request, without its question mark, as it belongs to the data forms too.
    root : str
        Path under which the service is mounted, without a slash at its end.
    """
    report = _Report(book, answer, distribution, measures, f"?{query}" if query else "", root)
    parts = (
        report.head(),
        report.headlines(),
        report.pictures(),
        *(report.allocation(result) for result in answer.allocations),
        report.worst(answer.tail) if answer.tail else "",
        report.method(),
        report.provenance(),
    )
    return page(f"Risk report: {book.name}", "".join(parts), root=root, foot=report.foot())


@dataclass(slots=True)
class _Report:
    """Makes the sections of a report."""

    book: BookHead
    answer: AllocationsAnswer
    distribution: Distribution
    measures: Sequence[Measure]
    query: str
    root: str
    _number: Iterator[int] = field(default_factory=lambda: count(1))

    @property
    def power(self) -> int:
        """Of ten, by which every amount of the page is divided."""
        return Amounts.of((one.value for one in self._figures()), self.answer.labels.currency).power

    def _figures(self) -> list[Figure]:
        """Return the figures of the cards, of which the largest decides the unit of the page."""
        return [self.answer.expected_loss, *(result.total for result in self.answer.allocations)]

    def _written(self, values: Iterable[float | None]) -> Amounts:
        """Return how amounts that stand together are written: all in the unit of the page."""
        return Amounts.of(values, self.answer.labels.currency, power=self.power)

    def head(self) -> str:
        """Return what the report is about and what it is not."""
        labels = self.answer.labels
        known = [
            ("Reference", labels.reference),
            ("Valuation date", labels.valuation_date),
            ("Horizon", labels.horizon),
            ("Amounts in", labels.currency),
            ("Scenarios", f"{self.answer.scenarios:,}"),
        ]
        words = " · ".join(f"{key}: {name(value)}" for key, value in known if value)
        return (
            f'<p class="soft">{words}</p>\n<p class="caution">{escape(CAUTIONS[0])} {escape(CAUTIONS[1])}</p>\n'
            f"<p>{self._unrounded()}</p>\n"
        )

    def _unrounded(self) -> str:
        paths = [book_path(self.root, self.book.name, f"allocations.{form}{self.query}") for form in ("json", "csv")]
        first, second = (link(path, path) for path in paths)
        return f"Figures on this page are rounded for reading. The unrounded ones are at {first} and {second}."

    def headlines(self) -> str:
        """Return the figures of the whole, with their errors in words."""
        results = {result.measure: result for result in self.answer.allocations}
        cards = [self._card("Expected loss", "The mean over all scenarios.", self.answer.expected_loss)]
        for measure in self.measures:
            result = results[measure.name]
            words = measure_words(measure.name)
            cards.append(self._card(words[:1].upper() + words[1:], measure_meaning(measure), result.total, result))
        few = self.answer.scenarios < FEW_SCENARIOS and any(one.interval for one in self._figures())
        rough = f'<p class="caution">{escape(ROUGH.format(self.answer.scenarios))}</p>\n' if few else ""
        return f'<section><h2>The whole book</h2>\n{rough}<div class="cards">{"".join(cards)}</div></section>\n'

    def _card(self, title: str, meaning: str, figure: Figure, result: Allocation | None = None) -> str:
        ends = figure.interval
        values = [figure.value] if ends is None else [figure.value, ends.lower, ends.upper]
        amounts = self._written(values)
        words = [meaning, sampling_error(figure, amounts)]
        alone = None if result is None or len(result.sub_portfolios) == 1 else sum_alone(result.sub_portfolios)
        saved = _saved(figure.value, alone)
        if alone is not None and saved is not None:
            shown = self._written([alone])
            words.append(
                f"The parts alone add up to {shown.text(alone)}{shown.after}: "
                f"{percent(saved)} of that {'is saved by' if saved >= 0.0 else 'is gained by'} holding them together."
            )
        lines = "".join(f"<p>{escape(one)}</p>" for one in words)
        unit = f" <span>{escape(amounts.unit)}</span>" if amounts.unit else ""
        return (
            f'<div class="card"><h3>{name(title)}</h3><p class="figure">{amounts.text(figure.value)}{unit}</p>'
            f"{lines}</div>\n"
        )

    def pictures(self) -> str:
        """Return the distribution and the exceedance curve."""
        marks = marks_of(self.measures, self.answer.allocations, self.answer.expected_loss)
        labels = self.answer.labels
        distribution = self._figure(
            lambda look: distribution_chart(self.distribution, marks, labels, look),
            sentence(DISTRIBUTION + (ENLARGED if enlarged(self.distribution) else "")),
        )
        exceedance = self._figure(
            lambda look: exceedance_chart(self.distribution, marks, labels, look),
            "How probable it is that a loss is exceeded. The last steps rest on a handful of scenarios.",
        )
        return f"<section><h2>How losses spread</h2>\n{distribution}{exceedance}</section>\n"

    def _figure(self, draw: Callable[[Look], str], caption: str) -> str:
        """Return a picture laid out twice, for a desk and for a telephone; only one is ever shown."""
        number = next(self._number)
        desk = draw(Look(inside=f"picture-{number}", power=self.power))
        phone = draw(Look(width=NARROW, inside=f"picture-{number}-phone", power=self.power))
        return (
            f'<figure><div class="desk">{desk}</div><div class="phone">{phone}</div>'
            f"<figcaption>{escape(caption)}</figcaption></figure>\n"
        )

    def allocation(self, result: Allocation) -> str:
        """Return how one measure is shared by one rule."""
        title = f"{measure_words(result.measure)}, shared by the {rule_words(result.rule)} rule"
        words = [RULES.get(result.rule, "")]
        amounts = self._written([result.total.value, *(one.contribution.value for one in result.sub_portfolios)])
        if result.window is not None:
            window = result.window
            words.append(
                "A quantile is one scenario, so contributions to it are smoothed over the "
                f"{window.scenarios:,} scenarios whose total lies between {amounts.text(window.lower)} and "
                f"{amounts.text(window.upper)}{amounts.after}."
            )
        if result.residual is not None:
            words.append(
                f"Contributions add up to {amounts.text(result.total.value - result.residual)}{amounts.after}; "
                f"{amounts.text(result.residual)}{amounts.after} of the total is not shared out."
            )
        picture = self._figure(
            lambda look: contributions_chart(result, self.answer.labels, look),
            "Contributions of the sub-portfolios, largest first, beside what each would need alone.",
        )
        tables = [
            self._parts("By sub-portfolio", "sub-portfolio", result, result.sub_portfolios),
            self._one_more(result),
        ]
        for attribute in dict.fromkeys(one.attribute for one in result.groups):
            groups = [one for one in result.groups if one.attribute == attribute]
            tables.append(self._parts(f"By {attribute}", attribute, result, groups))
        heading = f"<h2>{name(title[:1].upper() + title[1:])}</h2>\n<p>{escape(' '.join(filter(None, words)))}</p>\n"
        return f'<section class="allocation">{heading}{picture}{"".join(tables)}</section>\n'

    def _one_more(self, result: Allocation) -> str:
        """Return links to what more of each of the largest parts would change."""
        measure = next(one for one in self.measures if one.name == result.measure)
        largest = sorted(result.sub_portfolios, key=lambda one: -abs(one.contribution.value))[:MOST_LINKED]
        links = ", ".join(more_of(self.root, self.book.name, one.id, measure_query(measure)) for one in largest)
        return (
            f"<p>What would change if a part grew by a tenth, as CSV: {links}. The address takes any "
            "<code>sub_portfolio</code> and <code>scale</code>.</p>\n"
        )

    def _parts(self, caption: str, head: str, result: Allocation, parts: Sequence[Part]) -> str:
        """Return the table of sub-portfolios or of one attribute's groups, largest contribution first."""
        ordered = sorted(parts, key=lambda one: -one.contribution.value)
        if len(ordered) > MOST_ROWS:
            largest = sorted(ordered, key=lambda one: -abs(one.contribution.value))[:MOST_ROWS]
            ordered = sorted(largest, key=lambda one: -one.contribution.value)
            caption += f" (the {MOST_ROWS} largest of {len(parts):,})"
        alone, profit = sum_alone(parts), sum_profit(parts)
        amounts = self._written([result.total.value, *_amounts(ordered), alone, profit])
        whole = [
            Cell("total"),
            Cell(amounts.text(result.total.value)),
            Cell(_between(result.total, amounts)),
            Cell(percent(share_of_all(result))),
            Cell("–" if alone is None else f"sum {amounts.text(alone)}"),
            Cell(percent(_saved(result.total.value, alone))),
            Cell(amounts.text(self.answer.expected_loss.value)),
            Cell(amounts.text(profit)),
            Cell(percent(result.return_on_capital)),
            Cell(amounts.text(result.capital)),
        ]
        heads = [Cell(escape(head), "text"), *(Cell(words) for words in HEADS)]
        rows = [_part_cells(one, amounts) for one in ordered]
        kept = [
            number
            for number in range(len(heads))
            if number <= 1 or any(row[number].html != "–" for row in [*rows, whole])
        ]
        return table(
            caption,
            [heads[number] for number in kept],
            ([row[number] for number in kept] for row in rows),
            foot=[whole[number] for number in kept],
            unit=f"amounts in {amounts.unit}" if amounts.unit else "",
        )

    def worst(self, tail: Tail) -> str:
        """Return the worst scenarios, and the factors' means beyond the level."""
        amounts = self._written(one.total for one in tail.scenarios)
        heads = [
            Cell("scenario, counted from 1", "text"),
            Cell("probability"),
            Cell("total loss"),
            Cell(f"largest {LARGEST_PARTS} parts", "words"),
        ]
        rows = [_worst_cells(one, amounts) for one in tail.scenarios]
        unit = f"amounts in {amounts.unit}" if amounts.unit else ""
        scenarios = table("The worst scenarios", heads, rows, unit=unit)
        factors = ""
        if tail.factors:
            cells = [
                [
                    Cell(name(one.id)),
                    Cell(Amounts.of([one.mean], None, significant=4, power=0).text(one.mean)),
                    Cell(f"{one.normal_score:z.2f}"),
                ]
                for one in tail.factors
            ]
            factors = table(
                f"Mean of each factor where the total is beyond its {level_words(tail.level)} quantile",
                [Cell("factor", "text"), Cell("mean"), Cell("as a normal score")],
                cells,
            )
        return f"<section><h2>What the worst losses look like</h2>\n{scenarios}{factors}</section>\n"

    def method(self) -> str:
        """Return how the figures came about, the notes and the cautions."""
        methods = dict.fromkeys(
            ends.method for one in self.answer.allocations if (ends := one.total.interval) is not None
        )
        words = [sentence(self.answer.provenance.method)]
        if methods:
            words.append(f"Intervals of the totals: {', '.join(methods).replace('_', ' ')}.")
        else:
            words.append("No figure has an interval.")
        notes = "".join(f"<li>{escape(sentence(note.detail))}</li>" for note in self.answer.notes)
        noted = f"<h3>Notes</h3><ul>{notes}</ul>\n" if notes else ""
        cautions = "".join(f"<li>{escape(one)}</li>" for one in CAUTIONS)
        return (
            f"<section><h2>Method, notes and cautions</h2>\n<p>{escape(' '.join(words))}</p>\n{noted}"
            f"<h3>Cautions</h3><ul>{cautions}</ul></section>\n"
        )

    def provenance(self) -> str:
        """Return what an auditor needs to repeat the figures."""
        origin = self.answer.provenance
        known = [
            ("Book", self.book.name),
            ("Digest of the losses", origin.losses_digest),
            ("Digest of the request", origin.request_digest),
            ("Version of tailrace", origin.service_version),
            ("Seed", None if origin.seed is None else str(origin.seed)),
            ("Scenarios", f"{self.answer.scenarios:,}"),
        ]
        rows = "".join(f"<dt>{key}</dt><dd>{escape(value)}</dd>" for key, value in known if value is not None)
        return f"<section><h2>Where the figures come from</h2>\n<dl>{rows}</dl></section>\n"

    def foot(self) -> str:
        """Return the foot of the page."""
        return f"<p>{self._unrounded()}</p>"


ROUGH = "There are only {} scenarios: they tell little about how sure a figure is, and intervals made of them may miss."
DISTRIBUTION = "How probable losses of each size are. The worst ones have a colour of their own"
ENLARGED = (
    " and are drawn once more beneath, wider and with heights by the square root, so that single scenarios can be seen"
)
HEADS = (
    "contribution",
    "interval",
    "share",
    "stand-alone",
    "diver&shy;sified",
    "expected loss",
    "expected profit",
    "return",
    "allocated capital",
)


def _amounts(parts: Iterable[Part]) -> Iterable[float | None]:
    for one in parts:
        yield one.contribution.value
        yield None if one.stand_alone is None else one.stand_alone.value
        yield one.expected_loss
        yield one.expected_profit
        yield one.allocated_capital


def measure_query(measure: Measure) -> list[tuple[str, str]]:
    """Return the query parameters that ask for a measure."""
    numbers = [(key, f"{value:.15g}") for key, value in measure.parameters.items()]
    return [("measure", measure.kind), *numbers, *([("above", "mean")] if measure.above == "mean" else [])]


def _saved(total: float, alone: float | None) -> float | None:
    """Return by what part the total lies below the sum of the stand-alone figures."""
    return None if alone is None or alone <= 0.0 else (alone - total) / alone


def _part_cells(one: Part, amounts: Amounts) -> list[Cell]:
    title = str(one.id) if hasattr(one, "id") else group_words(one.group)
    return [
        Cell(name(title)),
        Cell(amounts.text(one.contribution.value)),
        Cell(_between(one.contribution, amounts)),
        Cell(percent(one.share)),
        Cell("–" if one.stand_alone is None else amounts.text(one.stand_alone.value)),
        Cell(percent(one.diversification_benefit)),
        Cell(amounts.text(one.expected_loss)),
        Cell(amounts.text(one.expected_profit)),
        Cell(percent(one.return_on_capital)),
        Cell(amounts.text(one.allocated_capital)),
    ]


def _between(figure: Figure, amounts: Amounts) -> str:
    ends = figure.interval
    return "–" if ends is None else f"{amounts.text(ends.lower)} to {amounts.text(ends.upper)}"


def _worst_cells(one: WorstScenario, amounts: Amounts) -> list[Cell]:
    largest = sorted(one.losses, key=lambda part: -part.value)[:LARGEST_PARTS]
    parts = "; ".join(f"{name(part.id)} {amounts.text(part.value)}" for part in largest)
    return [
        Cell(name(one.scenario_id) if one.scenario_id is not None else f"number {one.number + 1:,}"),
        Cell(probability(one.probability)),
        Cell(amounts.text(one.total)),
        Cell(parts, "words"),
    ]
