"""Survey -> Reference: calls the rooms in order and loops over them (noise, solve, vet, noise).

1. build the graph; find start values and the frames of the robots without any truth;
2. robust solve; then rounds of: solve the inlier set, assess it, re-estimate noise and odometry
   calibration, review rows and associations, until nothing changes;
3. the last assessment, at full weight, is what the products state.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.errors import IndeterminateError, SettingsError, SurveyError
from jointmap.graph.build import BuildSettings, build_problem
from jointmap.graph.calibrate import (
    Calibration,
    calibrated_robots,
    first_calibration,
    odometry_sensitivity,
    reintegrate,
)
from jointmap.graph.disputes import any_between_neighbours
from jointmap.graph.noise import Noise, block_covariance, initial_noise, whitening
from jointmap.graph.problem import Problem, State
from jointmap.graph.start import StartResult, initial_state
from jointmap.ingest.problems import did_you_mean
from jointmap.ingest.survey import Survey
from jointmap.products.assemble import assemble
from jointmap.products.reference import Reference
from jointmap.progress import Progress, Silent
from jointmap.settings import Settings
from jointmap.solve import gnc
from jointmap.solve.associations import Review, review
from jointmap.solve.decisions import Decisions, gate_rows, statistic_scale
from jointmap.solve.disputed import Mixed, Undecided
from jointmap.solve.graduate import graduate
from jointmap.solve.kernels import Kernel, RobustLoss
from jointmap.solve.linear import Ordering, system_order
from jointmap.solve.optimise import Optimised, OptimiseSettings, optimise
from jointmap.solve.session import (
    first_state,
    shared_models,
    system_of,
    undetermined,
    usable_rows,
    whiten_blocks,
    with_distances,
)
from jointmap.solve.shared import SharedModel
from jointmap.solve.system import Part, System, linearise, linearise_system, whitened_norm
from jointmap.trust.components import update_motion_noise, update_noise
from jointmap.trust.constants import Constants, judge_constants
from jointmap.trust.correlation import split_by_correlation
from jointmap.trust.deleted import fair_statistic
from jointmap.trust.holdout import enlarged, hold_out
from jointmap.trust.loose import find_loose
from jointmap.trust.outcome import Outcome, association_evidence
from jointmap.trust.quality import Quality, assess

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Noise has settled when no well-determined sigma changes by more than this factor in a round.
SETTLED = 1.1
#: The same for the first rounds, whose noise the final solve refines.
SETTLED_ROUGHLY = 1.2
#: Step of the odometry calibration, in prior sigmas, below which it stands still; the second where
#: noise is estimated along.
CALIBRATED, CALIBRATED_CHAINED = 1e-3, 0.02
#: Relative decrease of the objective at which a solve inside a loop stops, and the last ones.
COARSE, FINE = 1e-5, 1e-9
#: Changes of mind after which an association is left unresolved.
RESTLESS = 4
#: Probability that a good row agrees with the others of its spell.
STRAY_GATE = 1.0 - 1e-6
#: Kinds whose rows may return by what the others predict. Not sightings: of a landmark that little
#: else places, its association decides.
RETURNING = ("closure", "encounter", "fix")
#: Share of rows whose verdict may still flip when the final solve stands.
EDGE_SHARE = 1e-3
#: Metres or radians by which the final solve may still want to move when it stops.
REST = 1e-5
#: The same where noise is estimated along, which keeps the gates moving a little.
EDGE_SHARE_CHAINED = 4e-3


@dataclass
class _Run:
    """What a fusion carries from step to step."""

    survey: Survey
    settings: Settings
    progress: Progress
    problem: Problem
    noise: Noise
    calibration: Calibration
    start: StartResult
    state: State
    decisions: Decisions
    review: Review | None = None
    sensitivity: dict[int, Floats] | None = None
    ordering: tuple[bytes, Ordering] | None = None
    chained: bool = False
    settled: bool = True
    stray: list[Bools] | None = None
    back: list[Bools] | None = None
    flips: NDArray[np.int64] | None = None
    constants: Constants | None = None
    returned: list[Bools] | None = None
    notes: list[str] = field(default_factory=list)


def fuse(
    survey: Survey, settings: Settings | None = None, progress: Progress | None = None
) -> Reference:
    """Fuse the logs of a team into one reference.

    Parameters
    ----------
    survey : Survey
        From :func:`jointmap.read_survey`.
    settings : Settings, optional
    progress : Progress, optional
        Told about stages and iterations; silent by default.

    Returns
    -------
    Reference
        ``reference.status`` says whether it can be trusted as it is.

    Raises
    ------
    SettingsError
        The datum is to start at a robot that the survey has not.
    SurveyError
        The survey has nothing to solve.
    IndeterminateError
        The measurements leave something undetermined that leaving out loose ties does not mend;
        names robot and time, or the landmark.
    """
    settings = settings or Settings()
    progress = progress or Silent()
    named = settings.datum_robot
    if named is not None and named not in survey.robots:
        mend = did_you_mean(named, survey.robots)
        raise SettingsError(f"the survey has no robot {named!r} for the datum; {mend}")
    run = _prepare(survey, settings, progress)
    system, done, quality = _solved(run)
    evidence = hold_out(run.problem, system, quality)
    progress.stage("products")
    outcome = Outcome(
        survey=survey,
        problem=run.problem,
        noise=run.noise,
        calibration=run.calibration,
        decisions=run.decisions,
        review=run.review,
        system=system,
        state=done.state,
        quality=enlarged(quality, evidence.factor),
        start=run.start,
        optimised=done,
        settled=run.settled,
        notes=tuple(run.notes),
        holdout=evidence,
        constants=run.constants,
    )
    reference = assemble(outcome, settings, progress)
    progress.finish()
    return reference


def _solved(run: _Run) -> tuple[System, Optimised, Quality]:
    """All solves; where the system turns out singular, once more without the ties that are loose.

    Returns the last system, its solution and quality.
    """
    while True:
        try:
            _robust(run)
            _rounds(run)
            return _final(run)
        except IndeterminateError as error:
            _cut_loose(run, error)


def _cut_loose(run: _Run, error: IndeterminateError) -> None:
    """Leave out what ties a loose part to the rest, or what does not place its landmark.

    Raises
    ------
    IndeterminateError
        There is nothing to leave out; names what is loose.
    """
    loose = find_loose(_system(run, robust=False), run.state)
    forced = run.problem.tracks.forced[loose.links]
    if not loose.cuttable or forced.any():
        why = "; an association that edits.toml forces is its only tie" if forced.any() else ""
        raise IndeterminateError(f"the measurements do not determine {loose.words}{why}") from error
    before = run.decisions
    accepted = before.accepted.copy()
    accepted[loose.links] = False
    usable = tuple(a & ~rows for a, rows in zip(before.usable, loose.rows, strict=True))
    used = tuple(a & ~rows for a, rows in zip(before.used, loose.rows, strict=True))
    run.decisions = replace(before, accepted=accepted, usable=usable, used=used)
    run.chained = False
    _place_shared(run)
    n = sum(int(rows.sum()) for rows in loose.rows)
    what = [f"{len(loose.links)} associations"] if len(loose.links) else []
    what += [f"{n} measurements"] if n else []
    run.notes.append(f"{' and '.join(what)} do not determine {loose.words}; left out")


def _prepare(survey: Survey, settings: Settings, progress: Progress) -> _Run:
    progress.stage("build")
    calibration = first_calibration(survey, enabled=settings.calibrate)
    problem = build_problem(
        survey,
        BuildSettings(
            settings.keyframe_merge_s,
            settings.keyframe_spacing_s,
            settings.gap_s,
            settings.burst_gap_s,
            settings.burst_window_s,
        ),
        calibration.values,
    )
    if not any(b.kind == "odometry" for b in problem.blocks):
        raise SurveyError("no robot has two odometry rows: there is no trajectory to solve")
    noise = initial_noise(survey, problem)
    progress.stage("start values")
    start = initial_state(problem, noise)
    accepted = start.track_accepted & (problem.tracks.claim >= 0) & ~problem.tracks.rejected
    accepted |= problem.tracks.forced
    state = first_state(problem, start.poses, start.points, start.turns, accepted)
    usable = usable_rows(problem, state)
    decisions = Decisions(accepted, usable, tuple(np.ones(b.n) for b in problem.blocks), usable)
    run = _Run(survey, settings, progress, problem, noise, calibration, start, state, decisions)
    _drop_loose(run)
    return run


def _drop_loose(run: _Run) -> None:
    """Leave out sightings of landmarks that they cannot place."""
    system = _system(run, robust=False)
    loose = undetermined(run.problem, system, run.state)
    if not len(loose):
        return
    usable = tuple(
        rows & ~np.isin(b.b, loose) if b.kind == "sighting" else rows
        for b, rows in zip(run.problem.blocks, run.decisions.usable, strict=True)
    )
    run.decisions = replace(run.decisions, usable=usable, used=usable)


def _system(
    run: _Run,
    *,
    robust: bool,
    used: tuple[Bools, ...] | None = None,
    undecided: bool = False,
) -> System:
    kernel = _robust_loss(run.settings) if robust else None
    if undecided and kernel is not None:
        kernel = Undecided(kernel)
    shared: dict[int, SharedModel] = {}
    sensors: tuple[tuple[int, str], ...] = ()
    if run.chained and kernel is None and used is None:
        shared, sensors = shared_models(run.problem, run.noise, constant=run.settings.calibrate)
    whiten = whiten_blocks(run.problem, run.noise, shared)
    if run.sensitivity is None:
        run.sensitivity = odometry_sensitivity(run.problem, run.survey, run.calibration)
    decisions = run.decisions if used is None else replace(run.decisions, used=used)
    return system_of(
        run.problem,
        whiten,
        decisions,
        run.state,
        kernel,
        run.sensitivity,
        run.calibration,
        shared,
        sensors,
        None if run.constants is None else run.constants.used,
    )


def _robust_loss(settings: Settings) -> RobustLoss | None:
    if settings.kernel == gnc.NAME:
        # Where the schedule of graduated non-convexity ends; later solves start there.
        return gnc.Graduated(np.inf, settings.kernel_constant)
    if settings.kernel == "none":
        return None
    return Kernel(settings.kernel, settings.kernel_constant)


def _optimise(run: _Run, system: System, relative: float, rest: float = 0.0) -> Optimised:
    counter = [0]

    def report(text: str) -> None:
        counter[0] += 1
        run.progress.update(counter[0], text)

    settings = OptimiseSettings(run.settings.max_iterations, relative, rest=rest)
    key = _variables(system)
    known = run.ordering[1] if run.ordering is not None and run.ordering[0] == key else None
    done = optimise(system, run.state, settings, known, report)
    run.ordering = (key, done.ordering)
    return done


def _variables(system: System) -> bytes:
    """What tells one set of variables from another."""
    layout = system.layout
    key = layout.landmark_of_key.tobytes() + layout.calibration_key.tobytes()
    key += b"" if system.extras is None else system.extras.dims.tobytes()
    return key


def _ordering(run: _Run, system: System) -> Ordering:
    """Elimination ordering of a system, made once for each set of variables."""
    key = _variables(system)
    if run.ordering is None or run.ordering[0] != key:
        graph = linearise_system(system, run.state).graph
        run.ordering = (key, system_order(system, graph))
    return run.ordering[1]


def _absorb(run: _Run, done: Optimised) -> float:
    """Take over a solved state; its calibration step goes into the odometry itself.

    Returns the largest step of a calibration value in units of its prior's sigma.
    """
    step = 0.0
    if done.state.calibration:
        run.calibration, step = run.calibration.moved(done.state.calibration)
        run.problem = reintegrate(run.problem, run.survey, run.calibration, run.settings.gap_s)
        run.sensitivity = None
    run.state = replace(done.state, calibration={})
    if _estimates_noise(run):
        run.problem = with_distances(run.problem, run.state)
    return step


def _robust(run: _Run) -> None:
    """Robust solves until the odometry calibration stands still, then a first inlier set."""
    run.progress.stage("robust solve")
    if run.settings.kernel == gnc.NAME:
        _absorb(run, _graduate(run))
    _settle_disputes(run)
    for _ in range(4 if calibrated_robots(run.calibration) else 1):
        if _absorb(run, _optimise(run, _system(run, robust=True), 1e-3)) < 0.02:
            break
    _gate_by_norm(run, _system(run, robust=True))


def _settle_disputes(run: _Run) -> None:
    """Let the rest of the survey choose between odometry steps and closures that contradict them."""
    if not any_between_neighbours(run.problem):
        return
    system = _system(run, robust=True, undecided=True)
    if any(isinstance(part.kernel, Mixed) for part in system.parts):
        _absorb(run, _optimise(run, system, 1e-4))


def _graduate(run: _Run) -> Optimised:
    """Solution of graduated non-convexity; short solves, since the next stage moves on anyway."""
    system = _system(run, robust=True)
    ordering, stages = _ordering(run, system), [0]

    def solve(system: System, state: State) -> Optimised:
        stages[0] += 1
        run.progress.update(stages[0], "graduated non-convexity")
        return optimise(system, state, OptimiseSettings(iterations=10, relative=1e-3), ordering)

    return graduate(system, run.state, solve)


def _gate_by_norm(run: _Run, system: System) -> None:
    """Inlier rows by residuals at the robust solution against their own sigma."""
    used = [rows.copy() for rows in run.decisions.usable]
    weight = [np.ones(len(rows)) for rows in used]
    for part in system.parts:
        norm2 = _own_statistic(run, system, part)
        dof = np.full(len(norm2), float(part.whiten.shape[1]))
        keep, weights = gate_rows(part.block, norm2, dof, run.settings.gate_measurement)
        used[part.at][part.index] = keep
        weight[part.at][part.index] = weights
    run.decisions = replace(run.decisions, used=tuple(used), weight=tuple(weight))


def _own_statistic(run: _Run, system: System, part: Part) -> Floats:
    """Squared residual (n,) of each row in units of its own sigma, not of its burst's."""
    covariance = block_covariance(part.block, run.problem, run.noise, single=True)
    residual = linearise(system, part, run.state, jacobians=False, total=True).residual
    return whitened_norm(np.einsum("nij,nj->ni", whitening(covariance), residual)) ** 2


def _rounds(run: _Run) -> bool:
    """Rounds of robust solve, assessment, noise, calibration and decisions.

    Returns whether they settled.
    """
    estimate = _estimates_noise(run)
    if not estimate and not _doubted_tracks(run):
        # Nothing to learn from the robust state that the final solve would not show better.
        return True
    for number in range(run.settings.max_rounds):
        run.progress.stage(f"round {number + 1}")
        quality, system = _assess(run)
        change = 1.0
        if estimate:
            run.noise, change = update_noise(
                run.problem, run.noise, system, quality, first=number == 0
            )
        moved = _review(run, system, quality)
        if not moved and change < SETTLED_ROUGHLY:
            return True
        _absorb(run, _optimise(run, _system(run, robust=True), 1e-3))
        _gate_by_norm(run, _system(run, robust=True))
    return False


def _estimates_noise(run: _Run) -> bool:
    return run.settings.noise == "estimated" and any(t.free for t in run.noise.terms.values())


def _doubted_tracks(run: _Run) -> bool:
    """Whether the robust solution gave up half of an accepted track's sightings or more."""
    n = len(run.problem.tracks.robot)
    total, kept = np.zeros(n), np.zeros(n)
    rows = zip(run.problem.blocks, run.decisions.usable, run.decisions.used, strict=True)
    for block, usable, used in rows:
        if block.kind == "sighting":
            total += np.bincount(block.b[usable], minlength=n)
            kept += np.bincount(block.b[used], minlength=n)
    return bool((run.decisions.accepted & (total > 0) & (kept < 0.5 * total)).any())


def _assess(run: _Run) -> tuple[Quality, System]:
    """Covariances at the present state and inlier set."""
    system = _system(run, robust=False)
    return assess(system, run.state, _ordering(run, system)), system


def _review(run: _Run, system: System, quality: Quality) -> bool:
    """Judge the associations anew; says whether any decision changed."""
    evidence = association_evidence(run.problem, system, run.state, quality)
    run.review = review(
        run.problem.tracks, run.decisions.accepted, evidence, run.settings.gate_association
    )
    _settle_flips(run, run.review)
    changed = bool((run.review.accepted != run.decisions.accepted).any())
    run.decisions = replace(run.decisions, accepted=run.review.accepted)
    _place_shared(run)
    return changed


def _settle_flips(run: _Run, found: Review) -> None:
    """A name that comes and goes with each review is one that nothing can tell: it stays out."""
    if run.flips is None:
        run.flips = np.zeros(len(found.accepted), dtype=np.int64)
    run.flips += found.accepted != run.decisions.accepted
    restless = (run.flips >= RESTLESS) & ~run.problem.tracks.forced
    run.review = replace(
        found,
        accepted=found.accepted & ~restless,
        unresolved=found.unresolved | (restless & found.accepted),
    )


def _place_shared(run: _Run) -> None:
    """Shared landmarks without a value take the place of the tracks that now claim them."""
    shared = len(run.problem.tracks.landmarks)
    refreshed = first_state(
        run.problem,
        run.state.poses,
        run.state.landmarks[shared:],
        None if run.state.orientations is None else run.state.orientations[shared:],
        run.decisions.accepted,
    )
    run.state = replace(
        run.state, landmarks=refreshed.landmarks, orientations=refreshed.orientations
    )


def _final(run: _Run) -> tuple[System, Optimised, Quality]:
    """The inlier set at full weight; rows and associations are tested once more in it."""
    run.progress.stage("final solve")
    if _estimates_noise(run):
        apart = _system(run, robust=False)
        run.noise = split_by_correlation(run.problem, run.noise, apart, run.state)
        run.chained = True
    for number in range(run.settings.max_rounds):
        system = _system(run, robust=False)
        done = _optimise(run, system, COARSE if run.chained else FINE, REST)
        problem = run.problem
        step = _absorb(run, done)
        last = done.last if run.problem is problem else None
        system = _system(run, robust=False)
        quality = assess(system, run.state, _ordering(run, system), last)
        changed = _review_rows(run, system, quality)
        changed |= _review(run, system, quality)
        noise, change = run.noise, 1.0
        if run.chained and number == 0:
            changed |= _choose_constants(run, system, quality)
        if run.chained:
            noise, change = update_motion_noise(run.problem, run.noise, system, quality)
        still = CALIBRATED_CHAINED if run.chained else CALIBRATED
        run.settled = not changed and step < still and change < SETTLED
        if run.settled or number == run.settings.max_rounds - 1:
            break
        run.noise = noise
    return system, replace(done, state=run.state, last=None), quality


def _choose_constants(run: _Run, system: System, quality: Quality) -> bool:
    """Keep the constant errors of sensors that the data speak for; says whether any is given up."""
    run.constants = judge_constants(system, quality, run.state)
    return run.constants is not None and not bool(run.constants.used.all())


def _stray_rows(run: _Run, system: System, quality: Quality) -> list[Bools]:
    """Rows (per block) that contradict the others of their own spell; once out, they stay out."""
    if run.stray is None:
        run.stray = [np.zeros(b.n, dtype=bool) for b in run.problem.blocks]
    for part, white in zip(system.parts, quality.white, strict=True):
        if white is None:
            continue
        statistic, dof = white.statistic()
        keep, _ = gate_rows(part.block, statistic, dof, STRAY_GATE)
        run.stray[part.at][part.index[~keep]] = True
    return run.stray


def _review_rows(run: _Run, system: System, quality: Quality) -> bool:
    """Reject rows that the others contradict, take back those that agree after all."""
    before = run.decisions.used
    used = [rows.copy() for rows in before]
    scales: dict[int, float] = {}
    gate = run.settings.gate_measurement
    stray = _stray_rows(run, system, quality)
    for part, stats in zip(system.parts, quality.parts, strict=True):
        if part.block.kind == "odometry":
            continue
        statistic, dof = stats.statistic()
        single = _own_statistic(run, system, part)
        statistic, dof = np.maximum(statistic, single), np.where(dof > 0, part.whiten.shape[1], 0)
        scales[part.at] = statistic_scale(statistic, dof)
        keep, _ = gate_rows(part.block, statistic, dof, gate, scales[part.at])
        used[part.at][part.index] = keep
    left = tuple(a & ~u for a, u in zip(run.decisions.usable, before, strict=True))
    if any(rows.any() for rows in left):
        outside = _system(run, robust=False, used=left)
        for part in outside.parts:
            norm2 = _own_statistic(run, outside, part)
            dof = np.full(len(norm2), float(part.whiten.shape[1]))
            scale = scales.get(part.at, 1.0)
            keep, _ = gate_rows(part.block, norm2, dof, gate, scale)
            keep &= _first_return(run, part, keep)
            keep |= _returning(run, system, quality, outside, part, ~keep, scale)
            used[part.at][part.index] = keep
    used = [rows & ~out for rows, out in zip(used, stray, strict=True)]
    changed = sum(int((a != b).sum()) for a, b in zip(before, used, strict=True))
    lifted = _lift_odometry(run, system, quality)
    # A handful of rows on the very edge of the gate is not worth another solve.
    edge = EDGE_SHARE_CHAINED if run.chained else EDGE_SHARE
    if not lifted and changed <= edge * sum(rows.sum() for rows in before):
        return False
    run.decisions = replace(run.decisions, used=tuple(used))
    return True


def _first_return(run: _Run, part: Part, rows: Bools) -> Bools:
    """Rows (n,) that have not come back before: one on the edge of the gate must not come and go."""
    if run.back is None:
        run.back = [np.zeros(b.n, dtype=bool) for b in run.problem.blocks]
    fresh: Bools = np.asarray(~run.back[part.at][part.index])
    run.back[part.at][part.index[rows & fresh]] = True
    return fresh


def _returning(
    run: _Run,
    system: System,
    quality: Quality,
    outside: System,
    part: Part,
    asked: Bools,
    scale: float,
) -> Bools:
    """Rows (n,) left out that agree within what the others predict; each may return once."""
    if run.returned is None:
        run.returned = [np.zeros(b.n, dtype=bool) for b in run.problem.blocks]
    out = np.zeros(len(asked), dtype=bool)
    index = np.flatnonzero(asked & ~run.returned[part.at][part.index])
    if part.block.kind not in RETURNING or not len(index):
        return out
    covariance = block_covariance(part.block, run.problem, run.noise, single=True)[index]
    statistic, dof = fair_statistic(
        system, quality, outside, part, run.state, index, covariance, np.zeros(len(index))
    )
    limit = chi2.ppf(run.settings.gate_measurement, np.maximum(dof, 1)) * scale
    out[index] = (statistic <= limit) & (dof > 0)
    run.returned[part.at][part.index[out]] = True
    return out


def _lift_odometry(run: _Run, system: System, quality: Quality) -> bool:
    """Give steps that were doubted at the robust solution the weight that they deserve by now.

    Says whether any weight rose. No weight falls: the chain is doubted only where a kernel shows
    its slips, since in a solve at full weight the neighbours of a slip look as bad as the slip.
    """
    weights = [w.copy() for w in run.decisions.weight]
    risen = False
    for part in system.parts:
        weight = weights[part.at][part.index]
        index = np.flatnonzero(weight < 1.0)
        if part.block.kind != "odometry" or not len(index):
            continue
        own = _own_statistic(run, system, part)
        scale = statistic_scale(own, np.full(len(own), float(part.whiten.shape[1])))
        covariance = block_covariance(part.block, run.problem, run.noise, single=True)[index]
        statistic, dof = fair_statistic(
            system, quality, system, part, run.state, index, covariance, weight[index]
        )
        statistic = np.where(np.isfinite(statistic), statistic, np.inf)
        _, fair = gate_rows(part.block, statistic, dof, run.settings.gate_measurement, scale)
        better = (fair > 1.1 * weight[index]) & (dof > 0)
        weights[part.at][part.index[index[better]]] = fair[better]
        risen |= bool(better.any())
    run.decisions = replace(run.decisions, weight=tuple(weights))
    return risen
