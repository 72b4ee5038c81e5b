"""Campaigns: counts that are those of each trial by itself, whoever runs them, interrupted or not."""

from __future__ import annotations

import pickle
import threading
from collections import Counter
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from schemesim.engine.answers import FixedAnswers
from schemesim.engine.case import bind
from schemesim.engine.event import run_event
from schemesim.engine.outcome import Outcome, Status
from schemesim.engine.sensing import LogicalSensing, NoFault
from schemesim.errors import InputError, RunError
from schemesim.plant.model import Location
from schemesim.scheme.model import Role
from schemesim.study.campaign import Campaign
from schemesim.study.campaign_counts import PlaceCounts
from schemesim.study.campaign_replay import replay_trial
from schemesim.study.campaign_run import load_campaign, run_campaign
from schemesim.study.campaign_tallies import BIN_US, joined_ranges, missing_ranges, rounded_up
from schemesim.study.campaign_work import Chunk, Missing, run_work
from schemesim.study.dependability import study_dependability
from schemesim.study.injection import inject
from schemesim.study.store import Store
from tests.unit.campaign_cases import (
    F1,
    F2,
    MAIN,
    OPENING,
    SEED,
    as_counts,
    electrical,
    outcomes,
    program,
    roles,
    small,
    variants,
)


@pytest.fixture
def path(tmp_path: Path) -> str:
    return str(tmp_path / "campaign.db")


# --- what is counted ---------------------------------------------------------------------


@pytest.mark.parametrize("opening", [None, OPENING], ids=["fixed", "random"])
def test_counts_are_those_of_each_trial_by_itself(opening: Any, path: str) -> None:
    result = run_campaign(small(opening), path, chunk=50)
    assert result.complete
    assert len(result.places) == 4
    for name, of in variants(opening).items():
        for at in (F1, F2):
            found = result.where(name, at)
            each = outcomes(of, at, 120)
            bin_us = BIN_US if opening and found.facts.random else 1
            wanted = Counter(
                (str(o.status), None if o.t_clear_us is None else rounded_up(o.t_clear_us, bin_us), o.tripped)
                for o in each
            )
            assert found.trials == 120
            assert found.ranges == ((0, 120),)
            assert as_counts(found) == wanted
            by = Counter[str]()
            for t in found.tallies:
                by["nothing" if t.ending.cleared_by is None else t.ending.cleared_by.name] += t.trials
            assert by == roles(of, at, each)
    assert len(result.where("as it is", "F1").tallies) > 3


def test_measures_at_one_place(path: str) -> None:
    """Each against a plain count over the trials."""
    each = outcomes(program(OPENING), F1, 150)
    found = run_campaign(small(OPENING, 150, limit_us=100_000), path).where("as it is", F1)
    intended = frozenset({"F1.CB"})
    cleared = [o.t_clear_us for o in each if o.t_clear_us is not None]

    def n(happens: Callable[[Outcome], bool]) -> int:
        return sum(map(happens, each))

    assert found.facts.random
    assert found.facts.needed == found.facts.intended == intended
    assert found.p_cleared().successes == len(cleared) == n(lambda o: o.status is Status.CLEARED)
    assert found.p_within_limit().successes == n(lambda o: o.t_clear_us is not None and o.t_clear_us <= 100_000)
    assert found.p_within_limit(limit_us=70_000).successes == sum(t <= 70_000 for t in cleared) > 0
    assert found.p_selective().successes == n(lambda o: o.tripped <= intended) < 150
    assert {k: s.successes for k, s in found.breakers().items()} == Counter(len(o.tripped) for o in each)
    assert found.breakers_mean().estimate == pytest.approx(np.mean([len(o.tripped) for o in each]), rel=1e-12)
    beyond = np.mean([len(o.tripped - intended) for o in each])
    assert found.breakers_excess().estimate == pytest.approx(beyond, rel=1e-12)
    mean = found.t_clear_us_mean(0.95)
    assert mean.estimate == pytest.approx(np.mean(cleared), rel=1e-12)
    half = 1.959963984540054 * np.std(cleared, ddof=1) / np.sqrt(len(cleared))
    assert mean.high - mean.estimate == pytest.approx(half, rel=1e-9)
    assert found.quantile_us(0.5) == rounded_up(sorted([*cleared, *[10**9] * (150 - len(cleared))])[74], 1000)
    wilson, exact = found.p_cleared(0.9), found.p_cleared(0.9, "clopper_pearson")
    assert exact.low < wilson.low < wilson.estimate
    with pytest.raises(InputError, match="multiple of 1000"):
        found.p_within_limit(limit_us=70_500)
    with pytest.raises(InputError, match="interval"):
        found.share(lambda *_: True, method="normal")  # type: ignore[arg-type]  # that is the test
    with pytest.raises(InputError, match="confidence"):
        found.breakers_mean(1.5)
    with pytest.raises(InputError, match="quantile"):
        found.quantile_us(0)


def test_dependability_and_security_of_outputs_watched(path: str) -> None:
    """Against the event tree's bracket, by Clopper–Pearson at 99.9 %; the breakers are no part of either."""
    of = program()
    found = run_campaign(small(trials=1500, observe=MAIN), path)
    tree = study_dependability(of, LogicalSensing(), MAIN, [F1], epsilon=1e-6).dependability
    assert tree is not None
    inside, outside = found.where("as it is", F1), found.where("as it is", F2)
    share = inside.dependability(0.999, "clopper_pearson")
    assert share is not None
    assert share.low <= tree.high
    assert tree.low <= share.high < 1
    assert share.successes > inside.p_within_limit(limit_us=100_000).successes  # a breaker may stay
    assert inside.security() is None
    assert outside.dependability() is None
    assert (s := outside.security()) is not None
    assert s.successes == 1500  # a zone differential sees nothing there
    assert found.table().loc[0, "dependability_estimate"] == share.estimate


def test_trips_with_no_fault_are_events_too(path: str) -> None:
    event = NoFault("M1")
    campaign = Campaign({"x": program()}, (event,), trials=100, seed=SEED, observe=MAIN)
    found = run_campaign(campaign, path).where("x", event)
    case = bind(program(), event, LogicalSensing())
    assert found.p_cleared().successes == 0
    assert found.facts.wrong == MAIN
    assert (s := found.security()) is not None
    assert 0 <= s.successes < 10  # only without DC, one in a hundred, does the output stay silent
    assert case.duty.intended == frozenset() == found.facts.intended
    assert found.p_selective().successes + sum(t.trials for t in found.tallies if t.ending.breakers) == 100


def test_failure_sets_instead_of_trials(path: str) -> None:
    """Every pair that injection meets, by the same outcome; what a variant lacks is left aside there."""
    case = bind(program(), F1, LogicalSensing())
    rows = inject(case, 2).rows
    sets = tuple(r.failures for r in rows)
    assert len(sets) > 15
    campaign = Campaign(variants(OPENING), (F1,), failures=sets)
    assert campaign.rounds == len(sets)
    run_campaign(campaign, path, chunk=4)
    with Store(path) as store:
        chunks = list(store.chunks(0))
        assert [c.first for c in chunks] == list(range(0, len(sets), 4))
        each = [(c.tallies[i].ending, us) for c in chunks for i, us in c.each or ()]
        assert not chunks[0].facts.random  # nominal delays
    assert len(each) == len(rows)
    for (ending, us), row in zip(each, rows, strict=True):
        assert (ending.status, us, ending.breakers) == (row.outcome.status, row.outcome.t_clear_us, row.outcome.tripped)
    shared = next(n for n, names in enumerate(sets) if names == ("common cause same settings",))
    with Store(path) as store:
        apart = [(c.tallies[i].ending, us) for c in store.chunks(1) for i, us in c.each or ()]
    nothing = run_event(bind(variants(OPENING)["apart"], F1, LogicalSensing()), FixedAnswers(program())).outcome
    assert (apart[shared][1], apart[shared][0].breakers) == (nothing.t_clear_us, nothing.tripped)


# --- whoever runs it ---------------------------------------------------------------------


class Backwards(Executor):
    """Runs what it is given last first, and remembers what that was."""

    def __init__(self) -> None:
        self.waiting: list[tuple[Future[Any], Callable[..., Any], tuple[Any, ...]]] = []
        self.ran: list[tuple[int, int, int]] = []
        self.lock = threading.Lock()
        self.timer: threading.Timer | None = None

    def submit(self, fn: Any, /, *args: Any, **_: Any) -> Future[Any]:
        future: Future[Any] = Future()
        with self.lock:
            self.waiting.append((future, fn, args))
            if self.timer is None:
                self.timer = threading.Timer(0.02, self.run)
                self.timer.start()
        return future

    def run(self) -> None:
        with self.lock:
            todo, self.waiting, self.timer = self.waiting[::-1], [], None
        for future, fn, args in todo:
            if future.set_running_or_notify_cancel():
                try:
                    done = fn(*pickle.loads(pickle.dumps(args)))
                except BaseException as error:
                    future.set_exception(error)
                    continue
                if isinstance(done, Chunk):
                    self.ran.append((done.place, done.first, done.end))
                future.set_result(done)


@contextmanager
def loky() -> Iterator[Executor]:
    from joblib.externals.loky import get_reusable_executor  # type: ignore[import-untyped]  # carries no types

    executor = get_reusable_executor(max_workers=2, timeout=300)
    try:
        yield executor
    finally:
        executor.shutdown(wait=True)


@contextmanager
def backwards() -> Iterator[Executor]:
    yield Backwards()


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> tuple[PlaceCounts, ...]:
    """The small campaign in one process, in one piece for each place."""
    return run_campaign(small(OPENING), str(tmp_path_factory.mktemp("plain") / "s.db")).places


@pytest.mark.parametrize(
    ("executor", "chunk"),
    [
        (lambda: ThreadPoolExecutor(3), 11),
        (lambda: ProcessPoolExecutor(2), 40),
        (loky, 40),
        (backwards, 7),
    ],
    ids=["threads", "processes", "joblib's loky", "backwards"],
)
def test_any_executor_gives_the_same(executor: Any, chunk: int, path: str, plain: Any) -> None:
    with executor() as crew:
        assert run_campaign(small(OPENING), path, executor=crew, chunk=chunk).places == plain


def test_processes_of_its_own_give_the_same(path: str, plain: Any) -> None:
    assert run_campaign(small(OPENING), path, workers=2, chunk=33).places == plain


def test_each_variant_may_have_a_sensing_of_its_own(tmp_path: Path) -> None:
    campaign = electrical()
    result = run_campaign(campaign, str(tmp_path / "a.db"), chunk=7)
    assert run_campaign(campaign, str(tmp_path / "b.db"), workers=2, chunk=10).places == result.places
    for variant in campaign.variants:
        assert replay_trial(campaign, variant, "L1@0.05", 3, store=str(tmp_path / "a.db")).counted
    currents, graph = (bind(p, campaign.events[0], campaign.sensing_of(v)) for v, p in campaign.variants.items())
    assert type(currents.sensed) is not type(graph.sensed)
    assert len(set(campaign.keys.values())) == 2


# --- gone on with ------------------------------------------------------------------------


def test_an_interrupt_keeps_what_was_finished_and_nothing_is_repeated(path: str, plain: Any) -> None:
    crew = Backwards()
    told: list[tuple[int, int]] = []

    def interrupt(done: int, of: int) -> None:
        told.append((done, of))
        if len(told) in (4, 9):
            raise KeyboardInterrupt

    first = run_campaign(small(OPENING), path, executor=crew, chunk=10, progress=interrupt)
    assert not first.complete
    assert 0 < first.trials < first.wanted == 480
    assert "not complete" in repr(first)
    kept = {(c.place, c.first, c.end) for c in chunks_of(path)}
    again = Backwards()
    assert run_campaign(small(OPENING), path, executor=again, chunk=10, progress=lambda *_: None).places == plain
    assert kept.isdisjoint(again.ran)
    assert len(again.ran) + len(kept) == 48
    assert len({*again.ran, *kept}) == 48
    assert told[0] == (0, 480)


def chunks_of(path: str) -> list[Chunk]:
    with Store(path) as store:
        return [c for n in range(len(store.places())) for c in store.chunks(n)]


def test_more_trials_and_another_chunk_go_on_where_it_stopped(path: str, plain: Any) -> None:
    crew = Backwards()
    assert run_campaign(small(OPENING, 45), path, chunk=20).complete
    told: list[tuple[int, int]] = []
    more = run_campaign(small(OPENING), path, executor=crew, chunk=50, progress=lambda *x: told.append(x))
    assert more.places == plain
    assert told[0] == (180, 480)
    assert told[-1] == (480, 480)
    assert {r[1:] for r in crew.ran} == {(45, 50), (50, 100), (100, 120)}
    fewer = run_campaign(small(OPENING, 45), path)  # nothing to do: what is in stays in
    assert fewer.places == plain


def test_an_executor_that_breaks_keeps_what_was_finished(path: str, plain: Any) -> None:
    class Breaks(Backwards):
        def run(self) -> None:
            with self.lock:
                todo, self.waiting, self.timer = self.waiting, [], None
            for future, fn, args in todo:
                if len(self.ran) < 5:
                    done = fn(*args)
                    if isinstance(done, Chunk):
                        self.ran.append((done.place, done.first, done.end))
                    future.set_result(done)
                else:
                    future.set_exception(BrokenExecutor("a worker died"))

    crew = Breaks()
    with pytest.raises(RunError, match="lost a worker and is broken"):
        run_campaign(small(OPENING), path, executor=crew, chunk=10)
    crew.waiting.clear()
    assert {(c.place, c.first, c.end) for c in chunks_of(path)} <= set(crew.ran)
    assert len(chunks_of(path)) >= 1
    assert run_campaign(small(OPENING), path, chunk=10).places == plain
    down = ThreadPoolExecutor(1)
    down.shutdown()
    with pytest.raises(RunError, match="takes no work"):
        run_campaign(small(OPENING, 130), path, executor=down)


def test_a_trial_that_cannot_go_on_is_told_as_it_is(path: str, monkeypatch: pytest.MonkeyPatch) -> None:
    def stuck(*_: Any) -> None:
        raise RunError("the instant at 5 us does not settle")

    monkeypatch.setattr("schemesim.study.campaign_crew.run_work", stuck)
    with pytest.raises(RunError, match="does not settle"):
        run_campaign(small(), path)
    with ThreadPoolExecutor(1) as crew, pytest.raises(RunError, match="does not settle"):
        run_campaign(small(), path, executor=crew)
    assert load_campaign(path).trials == 0


# --- what travels ------------------------------------------------------------------------


def test_work_is_small_and_its_scheme_travels_once_to_each_worker() -> None:
    campaign = small(OPENING, observe=MAIN, horizon_us=9_999_999)  # no other test has this key in its thread
    work = replace(campaign.work(0, 0, 20), key="a scheme this thread has not met")
    assert len(pickle.dumps(work)) < 1500
    answer = run_work(work)
    assert isinstance(answer, Missing)
    done = run_work(replace(answer.work, packed=campaign.packed(0)))
    assert isinstance(done, Chunk)
    again = run_work(work)
    assert isinstance(again, Chunk)
    assert (again.tallies, again.facts) == (done.tallies, done.facts)
    assert pickle.loads(pickle.dumps(done)) == done
    assert len(pickle.dumps(done)) < 4000


def test_a_worker_of_another_version_refuses() -> None:
    work = small().work(0, 0, 5)
    other = tuple((name, "1.0" if name == "numpy" else v) for name, v in work.versions)
    with pytest.raises(RunError, match=r"other versions than the campaign: numpy .* \(campaign: 1\.0\)"):
        run_work(replace(work, versions=other))


# --- ranges, sums, refusals --------------------------------------------------------------


def test_counts_of_other_trials_add_up(tmp_path: Path, plain: Any) -> None:
    run_campaign(small(OPENING, 45), str(tmp_path / "a.db"))
    part = load_campaign(str(tmp_path / "a.db")).places[0]
    run_campaign(small(OPENING, 45), str(tmp_path / "b.db"))
    with pytest.raises(InputError, match="twice"):
        _ = part + part
    with pytest.raises(InputError, match="counts of"):
        _ = part + plain[1]
    rest = [c for c in chunks_after(small(OPENING), 45) if c.place == 0]
    other = replace(part, ranges=((45, 120),), tallies=tuple(t for c in rest for t in c.tallies))
    assert part + other == plain[0]


def chunks_after(campaign: Campaign, first: int) -> list[Chunk]:
    found = []
    for place in range(len(campaign.places)):
        done = run_work(replace(campaign.work(place, first, campaign.rounds), packed=campaign.packed(place)))
        assert isinstance(done, Chunk)
        found.append(done)
    return found


def test_ranges() -> None:
    rng = np.random.default_rng(5)
    for _ in range(50):
        trials, chunk = int(rng.integers(1, 60)), int(rng.integers(1, 20))
        pieces = list(missing_ranges((), trials, chunk))
        assert [t for a, b in pieces for t in range(a, b)] == list(range(trials))
        kept = [p for p in pieces if rng.random() < 0.5]
        other = int(rng.integers(1, 20))
        left = list(missing_ranges(kept, trials, other))
        assert sorted(t for a, b in (*kept, *left) for t in range(a, b)) == list(range(trials))
        assert all(b - a <= other for a, b in left)
        assert joined_ranges((*kept, *left)) == ((0, trials),)


def test_bad_campaigns_are_refused_with_every_mistake() -> None:
    with pytest.raises(InputError) as error:
        Campaign(
            variants(), (Location("F3"), Location("B", 2.0), NoFault("M9"), F1, F1), trials=-1, seed=-2,
            failures=(("M1: failure to operat",), ("M1: failure_to_operate",)), observe=frozenset({"M1.tripp"}),
            dispatch="winter", limit_us=-1,
        )  # fmt: skip
    told = str(error.value)
    for part in ("'F3'", "position on 'B'", "'M9'", "each event once", "trials: got -1", "seed: got -2",
                 "either trials or failure sets", "did you mean 'M1: failure_to_operate'", "did you mean 'M1.trip'",
                 "'winter'", "limit_us of F1"):  # fmt: skip
        assert part in told, part
    with pytest.raises(InputError, match=r"(?s)variants.*events.*either trials"):
        Campaign({}, ())
    with pytest.raises(InputError, match="a limit for F2"):
        Campaign(variants(), (F1, F2), trials=1, limit_us={F1: 100_000})
    with pytest.raises(InputError, match="one for each variant; as it is has none"):
        Campaign(variants(), (F1,), trials=1, sensing={"apart": LogicalSensing()})
    with pytest.raises(InputError, match="nil or certain"):
        Campaign(variants(), (F1,), failures=(("IN: delayed_operation",),))


def test_bad_ways_of_running_are_refused_and_leave_no_file(path: str) -> None:
    for bad in ({"workers": 0}, {"chunk": 0}, {"chunk": 1.5}):
        with pytest.raises(InputError, match=next(iter(bad))):
            run_campaign(small(), path, **bad)
    with ThreadPoolExecutor(1) as crew, pytest.raises(InputError, match="beside an executor"):
        run_campaign(small(), path, executor=crew, workers=2)
    assert not Path(path).exists()


def test_results_show_themselves(path: str, plain: Any) -> None:
    result = run_campaign(small(OPENING), path)
    assert repr(result).startswith("CampaignResult: 480 of 480 trials at 4 places\n  F1, as it is: 120 trials, ")
    assert result.table().shape[0] == 4
    assert "<table" in result._repr_html_()
    told = result.breakers_table()
    assert told.groupby(["variant", "event"])["trials"].sum().tolist() == [120] * 4
    assert repr(small()) == f"Campaign(2 events × 2 variants × 120 trials, seed {SEED})"
    with pytest.raises(InputError, match="did you mean 'F1, as it is'"):
        result.where("as it was", "F1")
    with pytest.raises(InputError, match=r"(?s)variant.*location"):
        small().number("other", "F9")
    assert "within the limit" in plain[0]._repr_html_()
    shown = plain[0].table(0.9, "clopper_pearson")
    assert shown["trials"].tolist()[3:] == [s.successes for s in plain[0].breakers().values()]
    drawn = plain[0].plot(ax=Figure().add_subplot())
    assert drawn.get_title(loc="left") == "F1, as it is: breakers tripped in 120 trials"
    assert plain[0].p_by_role(Role.MAIN).successes > 100
