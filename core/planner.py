"""Planning: which rules are built into the superset, and which are checked.

Planning is part of the draw: the same sheet must give the same plan on every machine, so everything is counted in
*steps* (nominal nanoseconds from the table of constants below), no clock decides, pilots have fixed numbers of proposals,
and their bits come from a key of their own.

The search widens its budget of edges step by step. Within a budget it tries to build in everything; if that does not fit,
it builds in one rule after the other, as far as they fit and pay. It stops when everything is built in, or when the search has cost
as much as drawing by the best plan found.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from core.errors import Infeasible, TooRare
from core.ledger import Ledger
from core.proposals import run_block
from core.rules import Rule
from core.sheet import Sheet, digest_of
from core.stream import Bits, make_key
from core.supersets import ARRANGEMENTS, arrangements, superset
from core.supersets.diagram import Diagram, OverBudget

FORMAT = "lotwright plan 1"

# Nominal nanoseconds, measured once (two cores, numpy 2.4) and shipped: part of what fixes the plan.
STEPS_PER_EDGE = 40
STEPS_PER_EVENT = 60_000
STEPS_PER_LEVEL = 150
STEPS_PER_ELEMENT = 12
STEPS_PER_CHECK = 4
BYTES_PER_EDGE = 60
BUDGETS = (50_000, 500_000, 5_000_000, 50_000_000)
# So much may be spent on planning, however cheap the draw.
ALWAYS = 300_000_000
# Plans are made for at least so many outcomes: size and chances are estimated from about as many.
FEWEST = 1000
# A diagram partly built in takes about so many edges for each node per level that remembers.
EDGES_PER_WIDTH = 500
PILOT = 1024
LONGEST_PILOT = 32 * PILOT
WANTED_IN_PILOT = 50
MOST_EDGES_COUNTED = 6_000_000

# Sizes are exact integers of any length, also in plans and records.
sys.set_int_max_str_digits(0)

Tick = Callable[[], None]


@dataclass(frozen=True)
class Plan:
    """How a sheet is drawn: all that a draw needs besides the sheet and the seed, as plain values.

    Attributes
    ----------
    sheet
        Digest of the sheet planned for.
    outcomes, memory
        What was asked: how many outcomes, and GiB.
    arrangement
        Name of the order of levels.
    built_in, partly, checked
        Ids of the rules built in (an id with "~" is a weaker form of a rule, see `Rule.weaker`); of those built in for the
        heavy nodes of each level only, with the number of such nodes; and of those checked, in the order of checking. A rule
        partly built in is checked too, unless no node forgot it.
    block
        Proposals per block.
    edges, nodes
        Size of the diagram.
    superset
        SHA-256 of the diagram's limits and edges: a rebuilt diagram must have the same.
    size
        Exact number of outcomes of the superset as decimal text, or None where the diagram is too large to count with
        integers; `about` is its size in words.
    pilot
        Ledger of the last pilot: proposals made with bits of their own and thrown away; their number is fixed beforehand.
    words
        Why, in sentences.
    """

    sheet: str
    outcomes: int
    memory: float
    arrangement: str
    built_in: tuple[str, ...]
    partly: tuple[tuple[str, int], ...]
    checked: tuple[str, ...]
    block: int
    edges: int
    nodes: int
    superset: str
    size: str | None
    about: str
    pilot: dict[str, Any]
    words: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """Return the plan as JSON values."""
        return {
            "format": FORMAT,
            "sheet": self.sheet,
            "outcomes": self.outcomes,
            "memory": str(self.memory),
            "arrangement": self.arrangement,
            "built_in": list(self.built_in),
            "partly": [list(item) for item in self.partly],
            "checked": list(self.checked),
            "block": self.block,
            "edges": self.edges,
            "nodes": self.nodes,
            "superset": self.superset,
            "size": self.size,
            "about": self.about,
            "pilot": self.pilot,
            "words": list(self.words),
        }

    @classmethod
    def from_json(cls, value: dict[str, Any]) -> Plan:
        """Return the plan that JSON values state. Raises KeyError, TypeError or ValueError if they are none."""
        if value["format"] != FORMAT:
            raise ValueError(f"this is no plan of a known format: {value['format']}")
        return cls(
            sheet=str(value["sheet"]),
            outcomes=int(value["outcomes"]),
            memory=float(value["memory"]),
            arrangement=str(value["arrangement"]),
            built_in=tuple(map(str, value["built_in"])),
            partly=tuple((str(id), int(width)) for id, width in value["partly"]),
            checked=tuple(map(str, value["checked"])),
            block=int(value["block"]),
            edges=int(value["edges"]),
            nodes=int(value["nodes"]),
            superset=str(value["superset"]),
            size=None if value["size"] is None else str(value["size"]),
            about=str(value["about"]),
            pilot=dict(value["pilot"]),
            words=tuple(map(str, value["words"])),
        )

    @property
    def digest(self) -> str:
        """SHA-256 of the plan in canonical form."""
        return digest_of(self.to_json())


@dataclass(frozen=True, eq=False)
class Ready:
    """A plan together with what it stands for, ready to propose."""

    sheet: Sheet
    plan: Plan
    diagram: Diagram
    checks: tuple[Rule, ...]


# Rules built in for the heavy nodes only, each with the number of nodes per level that remember it.
Partly = tuple[tuple[Rule, int], ...]


@dataclass
class _Candidate:
    rules: tuple[Rule, ...]
    partly: Partly
    diagram: Diagram
    arrangement: str
    checks: tuple[Rule, ...]
    pilot: Ledger
    steps: int
    per_proposal: int

    def acceptance(self) -> float:
        """Return the acceptance for comparing: where the pilot accepts nothing, the product of the single rates."""
        if self.pilot.accepted:
            return self.pilot.accepted / self.pilot.proposed
        rate = 1.0
        for count in self.pilot.rules.values():
            rate *= (self.pilot.sampled - count.any + 0.5) / (self.pilot.sampled + 1)
        return min(rate, 0.5 / (self.pilot.proposed + 1))

    def cost(self, outcomes: int) -> float:
        """Return steps to build and to draw so many outcomes."""
        return self.steps + outcomes * self.per_proposal / self.acceptance()


_Name = tuple[tuple[str, ...], tuple[tuple[str, int], ...]]


@dataclass
class _Search:
    sheet: Sheet
    outcomes: int
    memory: float
    tick: Tick
    spent: int = 0  # steps, over all attempts
    tried: dict[_Name, int] = field(default_factory=dict)
    found: dict[_Name, _Candidate] = field(default_factory=dict)

    def best(self) -> _Candidate:
        return min(self.found.values(), key=lambda c: (c.cost(self.outcomes), _name(c.rules, c.partly)))

    def attempt(
        self, rules: Sequence[Rule], budget: int, arrangement: str = "", partly: Partly = ()
    ) -> _Candidate | None:
        """Return the candidate that builds in these rules, or None if it would need more edges than `budget`.

        All orders of levels are tried, or only the one named.
        """
        chosen = (
            *(rule for rule in self.sheet.rules if rule in rules),
            *(rule for rule in rules if rule not in self.sheet.rules),
        )
        name = _name(chosen, partly)
        if name in self.found:
            return self.found[name]
        if self.found:
            budget = min(budget, int(self.allowance() - self.spent) // STEPS_PER_EDGE)
        if self.tried.get(name, 0) >= budget:
            return None
        self.tried[name] = budget
        smallest = self._smallest(chosen, partly, budget, [arrangement] if arrangement else self._orders())
        if smallest is None:
            return None
        diagram, order = smallest
        if diagram.is_empty:
            raise _impossible(self.sheet, (*chosen, *(rule for rule, _ in partly)), order, budget, self.tick)
        self.found[name] = self._piloted(chosen, partly, diagram, order)
        return self.found[name]

    def _orders(self) -> Sequence[str]:
        return arrangements(self.sheet.kind)

    def _smallest(
        self, chosen: tuple[Rule, ...], partly: Partly, budget: int, names: Sequence[str]
    ) -> tuple[Diagram, str] | None:
        """Return the smallest diagram of these rules over these orders of levels."""
        found: tuple[Diagram, str] | None = None
        for arrangement in names:
            if found is not None and found[0].tried < BUDGETS[0]:
                break
            limit = budget if found is None else found[0].tried - 1
            if self.found:
                limit = min(limit, int(self.allowance() - self.spent) // STEPS_PER_EDGE)
            if limit <= 0:
                break
            try:
                diagram = superset(self.sheet.kind, chosen, arrangement, partly=partly, budget=limit, tick=self.tick)
            except OverBudget as over:
                self.spent += limit * STEPS_PER_EDGE + over.events * STEPS_PER_EVENT
                continue
            self.spent += _building(diagram)
            found = diagram, arrangement
        return found

    def _piloted(self, chosen: tuple[Rule, ...], partly: Partly, diagram: Diagram, arrangement: str) -> _Candidate:
        # where no node has forgotten, what is partly built in holds everywhere
        held = chosen if diagram.forgetful else (*chosen, *(rule for rule, _ in partly))
        checks = tuple(rule for rule in self.sheet.rules if rule not in held)
        pilot = run_pilot(self.sheet, diagram, checks, PILOT, "pilot")
        width = self.sheet.kind.width
        per_proposal = diagram.levels * STEPS_PER_LEVEL + width * STEPS_PER_ELEMENT
        per_proposal += sum(rule.effort() for rule in checks) * width * STEPS_PER_CHECK
        self.spent += PILOT * per_proposal
        return _Candidate(chosen, partly, diagram, arrangement, checks, pilot, _building(diagram), per_proposal)

    def run(self) -> _Candidate:
        """Search within wider and wider budgets; return the cheapest candidate."""
        largest = int(self.memory * 2**30) // BYTES_PER_EDGE
        self.attempt((), largest)
        if not self.found:
            raise TooRare("Planning needs more memory than allowed even without building in a rule; raise --memory.")
        for step in BUDGETS:
            budget = min(step, largest)
            if self.spent > self.allowance():
                break
            full = self.attempt(self.sheet.rules, budget) if self._hopeful() else None
            if full is not None:
                # the exact size is worth a cheap build, even where a draw alone would not need it
                return full if full.cost(self.outcomes) <= ALWAYS else self.best()
            plain, best = self.found[_name((), ())], self.best()
            self._grow(budget, best)
            if best is not plain and not best.pilot.accepted:
                self._grow(budget, plain)  # a wider budget may hold what the first choices left no room for
        return self.best()

    def _hopeful(self) -> bool:
        """Return whether no single rule has been too large on its own: then all of them would hardly fit."""
        alone = ((rule.id,) for rule in self.sheet.rules)
        return not any((ids, ()) in self.tried and (ids, ()) not in self.found for ids in alone)

    def allowance(self) -> float:
        """Return the steps that may be spent on planning: as much as the best plan so far takes to draw."""
        return max(ALWAYS, self.best().cost(self.outcomes))

    def _grow(self, budget: int, current: _Candidate) -> None:
        """Build in one rule more at a time, the one that rejects most first, as far as the budget holds them.

        What does not fit as a whole is tried in a weaker form, and then partly: with as many nodes per level that remember
        it as the budget allows.
        """
        left = [rule for rule in current.checks if rule not in [r for r, _ in current.partly]]
        while left:
            counts = current.pilot.rules
            left.sort(key=lambda rule: (-counts[rule.id].any if rule.id in counts else 0, rule.id))
            rule = left.pop(0)
            if rule.id not in counts or not counts[rule.id].any:
                return
            # the first rule settles the order of levels
            order = current.arrangement if current.rules or current.partly else ""
            rest = [r for r in current.rules if not r.id.startswith(f"{rule.id}~")]
            candidate = None
            for form in (rule, *rule.weaker()):
                candidate = candidate or self.attempt((*rest, form), budget, order, current.partly)
            if candidate is None and budget > BUDGETS[0] and rule.counts_along():
                partly = (*current.partly, (rule, budget // EDGES_PER_WIDTH))
                candidate = self.attempt(current.rules, budget, order, partly)
            if candidate is not None and candidate.cost(self.outcomes) < current.cost(self.outcomes):
                current = candidate


def _name(rules: Sequence[Rule], partly: Partly) -> _Name:
    return tuple(rule.id for rule in rules), tuple((rule.id, width) for rule, width in partly)


def _building(diagram: Diagram) -> int:
    return diagram.tried * STEPS_PER_EDGE + diagram.events * STEPS_PER_EVENT


def run_pilot(sheet: Sheet, diagram: Diagram, checks: Sequence[Rule], proposals: int, label: str) -> Ledger:
    """Return the ledger of a pilot: its bits, under a label of their own, are not those of any draw."""
    ids = [rule.id for rule in checks]
    key = make_key(label, sheet.digest)
    ledger = Ledger.over(ids)
    size = pilot_block(sheet)
    for block in range((proposals + size - 1) // size):
        count = min(size, proposals - block * size)
        ledger.add(run_block(diagram, checks, Bits(key, block), count, count).ledger(ids))
    return ledger


def pilot_block(sheet: Sheet) -> int:
    """Return how many proposals are handled at once: fewer where an outcome is large."""
    return max(16, min(PILOT, (1 << 22) // sheet.kind.width))


def make_plan(sheet: Sheet, *, outcomes: int = 1, memory: float = 4.0, tick: Tick = lambda: None) -> Ready:
    """Return the plan of a sheet.

    Parameters
    ----------
    outcomes
        How many outcomes are wanted: the more, the more planning pays.
    memory
        GiB that a diagram may take.
    tick
        Called often; may raise to stop the work.

    Raises
    ------
    Infeasible
        if it is proved that no outcome meets the rules; carries a smallest conflicting set.
    """
    search = _Search(sheet, max(outcomes, FEWEST), memory, tick)
    best = search.run()
    checks = list(best.checks)
    # the search chose by its own pilots, so a fresh one says what to expect; its size is fixed before it is made
    proposals = PILOT
    while checks and proposals < LONGEST_PILOT and proposals * best.acceptance() < WANTED_IN_PILOT:
        proposals *= 2
    pilot = run_pilot(sheet, best.diagram, checks, proposals, "last pilot")
    tick()
    checks.sort(key=lambda rule: (-Fraction(pilot.rules[rule.id].any, rule.effort()), rule.id))
    countable = best.diagram.edges <= MOST_EDGES_COUNTED
    plan = Plan(
        sheet=sheet.digest,
        outcomes=outcomes,
        memory=memory,
        arrangement=best.arrangement,
        built_in=tuple(rule.id for rule in best.rules),
        partly=tuple((rule.id, width) for rule, width in best.partly),
        checked=tuple(rule.id for rule in checks),
        block=_block_size(sheet, outcomes, max(best.acceptance(), 1e-6)),
        edges=best.diagram.edges,
        nodes=best.diagram.nodes,
        superset=best.diagram.digest,
        size=str(best.diagram.size) if countable else None,
        about=size_words(best.diagram.size if countable else int(best.diagram.weight), exact=countable),
        pilot=_pilot_json(pilot, [rule.id for rule in checks]),
        words=_reasons(search, best),
    )
    return Ready(sheet, plan, best.diagram, tuple(checks))


def ready(sheet: Sheet, plan: Plan, *, tick: Tick = lambda: None) -> Ready:
    """Return a plan made earlier, its superset built again.

    Raises
    ------
    ValueError
        naming what differs: the plan was made for another sheet, or the superset comes out differently.
    """
    if plan.sheet != sheet.digest:
        raise ValueError("the plan was made for another sheet")
    known = {rule.id: rule for rule in sheet.rules}
    forms = known | {form.id: form for rule in sheet.rules for form in rule.weaker()}
    held = {*plan.built_in, *plan.checked, *(id for id, _ in plan.partly)}
    if not set(known) <= held <= set(forms) or plan.arrangement not in ARRANGEMENTS:
        raise ValueError("the plan names other rules than the sheet")
    largest = int(plan.memory * 2**30) // BYTES_PER_EDGE
    built_in = [forms[id] for id in plan.built_in]
    partly = [(known[id], width) for id, width in plan.partly]
    diagram = superset(sheet.kind, built_in, plan.arrangement, partly=partly, budget=largest, tick=tick)
    if diagram.forgetful and not {id for id, _ in plan.partly} <= set(plan.checked):
        raise ValueError("the plan leaves a rule unchecked that is built in only partly")
    if diagram.digest != plan.superset:
        raise ValueError("the superset comes out differently here than when the plan was made")
    return Ready(sheet, plan, diagram, tuple(known[id] for id in plan.checked))


def _impossible(sheet: Sheet, rules: tuple[Rule, ...], arrangement: str, budget: int, tick: Tick) -> Infeasible:
    """Return the proof that the rules conflict, with a smallest set: each rule left out makes it possible."""
    conflict = list(rules)
    for rule in rules:
        rest = [other for other in conflict if other is not rule]
        try:
            if superset(sheet.kind, rest, arrangement, budget=4 * budget, tick=tick).is_empty:
                conflict = rest
        except OverBudget:
            continue
    if len(conflict) == 1:
        message = "No outcome is possible: this rule can never hold."
    else:
        message = f"No outcome is possible: these {len(conflict)} rules cannot hold together."
    return Infeasible(message, tuple(r.id for r in conflict), tuple(r.words() for r in conflict))


def _block_size(sheet: Sheet, outcomes: int, acceptance: float) -> int:
    """Return proposals per block: a power of two, enough for the outcomes wanted, small enough to stop quickly."""
    most = max(16, min(4096, (1 << 21) // sheet.kind.width))
    wanted = max(64, min(most, int(2 * outcomes / acceptance)))
    return min(most, 1 << (wanted - 1).bit_length())


def _pilot_json(pilot: Ledger, ids: Sequence[str]) -> dict[str, Any]:
    return {
        "proposals": pilot.proposed,
        "accepted": pilot.accepted,
        "rules": [{"id": id, "any": pilot.rules[id].any, "alone": pilot.rules[id].alone} for id in ids],
    }


def _reasons(search: _Search, best: _Candidate) -> tuple[str, ...]:
    """Return in sentences why the plan is as it is."""
    rules = search.sheet.rules
    words = [f"The superset is built level by level, {ARRANGEMENTS[best.arrangement]}."]
    if not best.checks:
        words.append("Every rule is built in: each proposal is an outcome, and the number of outcomes is exact.")
        return tuple(words)
    widths = {rule.id: width for rule, width in best.partly}
    for rule in best.checks:
        count = best.pilot.rules[rule.id]
        share = f"rejects {100 * count.any / max(1, best.pilot.sampled):.3g} % of the pilot's proposals"
        name = _name([r for r in rules if r in best.rules or r is rule], best.partly)
        form = next((r.id for r in best.rules if r.id.startswith(f"{rule.id}~")), None)
        if form is not None:
            step = form.split("~")[1]
            words.append(f"Rule {rule.id} is built in roughly (rounded to steps of {step}) and checked ({share}).")
            continue
        if rule.id in widths:
            words.append(
                f"Rule {rule.id} is built in partly, for the {widths[rule.id]:,} most likely states of each level, and "
                f"checked ({share}): more states remembered would take longer than they save."
            )
            continue
        if not count.any:
            reason = "it rejected nothing in the pilot, so building it in would gain nothing"
        elif name in search.found:
            reason = "building it in would take longer than it saves"
        elif name in search.tried:
            reason = f"built in, it would need more than {search.tried[name]:,} edges"
        else:
            reason = "another choice of rules is cheaper"
        words.append(f"Rule {rule.id} is checked ({share}): {reason}.")
    return tuple(words)


def size_words(size: int, *, exact: bool) -> str:
    """Return a number of outcomes in words: digits up to 10^15, else a power of ten with four digits."""
    about = "" if exact else "about "
    if size < 10**15:
        return f"{about}{size:,}"
    digits = str(size)
    lead = round(int(digits[:8]) / 10_000)
    exponent = len(digits) - 1
    if lead == 10_000:
        lead, exponent = 1000, exponent + 1
    return f"{about}{lead // 1000}.{lead % 1000:03d} x 10^{exponent}"
