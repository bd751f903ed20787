"""Posterior sampling of cluster centres, with the parameters known or unknown."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves._pairs import cell_order
from geoclust.fitting import _chain, _kernels, _moves
from geoclust.fitting._table import sum_of_shares
from geoclust.fitting.shares import far_densities, heavy_tailed, share_table
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int32]
Progress = Callable[[str, int, int], None]

MOVES = ("birth", "death", "shift", "split", "merge", "scale", "background")
# moves in one compiled call: well below a second, so that an interrupt is seen
PORTION = 20_000
# cells of the points: long rows keep the compiled loops busy, small ones skip points out of reach
CELL_IN_SCALES = 2.5
# share of shifts, and of splits and merges, for clusters that stand apart or overlap
APART = (0.3, 0.3)
OVERLAPPING = (0.1, 0.2)
# births proposed anywhere in the widened study area rather than near a point
UNIFORM_SHARE = 0.15


@dataclass(frozen=True)
class Priors:
    """Proper priors of the parameters, set from the extent of the survey.

    Attributes
    ----------
    parent_intensity
        Shape and rate (m²) of a Gamma distribution; None if both intensities are known.
    mean_offspring
        Shape and rate of a Gamma distribution; None likewise.
    log_scale
        Mean and standard deviation of the logarithm of the scale in metres; cut at `scale_bounds`.
    scale_bounds
        Smallest and largest scale, metres.
    background
        Mean of the exponential prior of background points per m² in units of the mean offspring, or None.
    """

    parent_intensity: tuple[float, float] | None
    mean_offspring: tuple[float, float] | None
    log_scale: tuple[float, float]
    scale_bounds: tuple[float, float]
    background: float | None = None


@dataclass(eq=False)
class Draws:
    """What the chains recorded; first axis chain, second axis draw.

    Attributes
    ----------
    number_inside, number_all
        (c, m) centres in the study area, and in the widened one.
    scale, background, parent_intensity, mean_offspring
        (c, m) parameters; constant if they were known.
    centres
        Per chain and draw, (k, 2) local coordinates, those outside included.
    owner
        (c, m, n) row of the centre of each point; -1 for background and, with a heavy tail, for
        centres outside the widened study area.
    acceptance
        Share of tries accepted, by move.
    """

    number_inside: npt.NDArray[np.int64]
    number_all: npt.NDArray[np.int64]
    scale: Floats
    background: Floats
    parent_intensity: Floats
    mean_offspring: Floats
    centres: list[list[Floats]]
    owner: Ints
    acceptance: dict[str, float] = field(default_factory=dict)


class ChainSetup:
    """Everything that the chains of one survey share.

    Parameters
    ----------
    local_xy
        (n, 2) points, local coordinates.
    area
        The study area.
    kind
        The model.
    start
        Parameters to start from; those sampled with, if `priors` is None.
    priors
        Priors of unknown parameters, or None if the parameters are known.
    margin
        How far outside the study area centres are looked for, metres.
    intensity
        Thins the points place by place, relative to its mean; None if it is constant. As it is the
        same factor for every centre that a point may belong to, only the exposures change.
    """

    def __init__(
        self,
        local_xy: Floats,
        area: StudyArea,
        start: ClusterModel,
        *,
        priors: Priors | None = None,
        margin: float | None = None,
        workers: int | None = None,
        intensity: Intensity | None = None,
    ) -> None:
        kind = type(start)
        self.area = area
        self.start = start
        self.priors = priors
        scale = start.scale
        self.margin = kind.margin_in_scales * scale if margin is None else margin
        self.wide = area.dilated(self.margin)
        largest = priors.scale_bounds if priors is not None else (scale, scale)
        self.table = share_table(kind, area, self.margin, largest, workers, intensity)
        self.intensity = intensity
        self.reach = kind.reach_in_scales
        self.target = _target(start, priors)
        self.data, self.order = _sorted_data(local_xy, area, self.wide, scale, self.reach)
        if heavy_tailed(kind):
            points = np.column_stack([self.data.x, self.data.y])
            densities, shares = far_densities(area, self.wide, points, largest, intensity)
            self.data = self.data._replace(far=densities)
            if not self.target.known:
                self.table = self.table._replace(far=shares)

    @property
    def n(self) -> int:
        """Number of points."""
        return len(self.data.x)

    def holds(self, survey: Survey) -> bool:
        """Whether these chains are of this survey."""
        same = self.area is survey.area or self.area.polygon.equals(survey.area.polygon)
        return same and self.n == survey.n


class Chain:
    """One chain: its state, its random numbers, its record."""

    def __init__(self, setup: ChainSetup, rng: np.random.Generator) -> None:
        self.setup = setup
        self.rng = rng
        n = setup.n
        scale = setup.start.scale
        expected = setup.start.parent_intensity * setup.wide.area
        eta = 0.0
        if setup.target.with_background:
            eta = min(setup.target.background_mean, 0.05 * setup.start.parent_intensity)
        room = int(4 * expected + n + 64)
        self.state = _moves.State(
            np.zeros((room, 2)), np.zeros(room), np.zeros(n), np.zeros(n), np.zeros(1, np.int64),
            np.array([scale, eta, 0.0]), np.zeros(7, np.int64), np.zeros(7, np.int64),
        )  # fmt: skip
        self.walk = np.array([0.05, 0.5])
        self.mix = np.array(APART)
        self._work_arrays()
        self._first_centres(expected * rng.uniform(0.6, 1.4))
        self.records: list[tuple[Floats, float, float, Ints]] = []

    def _work_arrays(self) -> None:
        n, room = self.setup.n, len(self.state.share)
        self.work = _moves.Work(
            np.zeros(2, np.int64), np.zeros(4, np.int64), np.zeros(n), np.zeros(n), np.zeros(room),
            np.zeros(n), np.zeros(n, np.int32),
        )  # fmt: skip

    def _first_centres(self, expected: float) -> None:
        """Start from centres near random points, none left uncovered; chains start apart."""
        s, data, rng = self.state, self.setup.data, self.rng
        reach = 0.7 * self.setup.reach * s.scalars[_moves.SCALE]
        if self.setup.target.kernel == _kernels.DISC:
            reach = 0.9 * s.scalars[_moves.SCALE]
        count = int(rng.poisson(expected))
        places = []
        if self.setup.n:
            picks = rng.permutation(self.setup.n)[:count]
            places = [(data.x[k], data.y[k]) for k in picks]
            covered = np.zeros(self.setup.n, bool)
            for x, y in places:
                covered |= np.hypot(data.x - x, data.y - y) < reach
            while not covered.all():
                k = int(np.flatnonzero(~covered)[0])
                places.append((data.x[k], data.y[k]))
                covered |= np.hypot(data.x - data.x[k], data.y - data.y[k]) < reach
        rest = count - len(places)
        if rest > 0:
            shift = self.setup.wide.origin - self.setup.area.origin
            places += [tuple(p) for p in self.setup.wide.local_uniform_points(rest, rng) + shift]
        for k, (x, y) in enumerate(places):
            s.centres[k] = x, y
        s.number[0] = len(places)
        self._recompute()

    def _recompute(self) -> None:
        s = self.state
        s.scalars[_moves.EXPOSURE] = _moves.recompute(
            self.setup.data, self.setup.target, s, s.scalars[_moves.SCALE], s.density, s.share, s.far,
            self.setup.table,
        )  # fmt: skip

    def advance(self, moves: int, every: int) -> None:
        """Make `moves` moves, in portions that an interrupt can come between."""
        left = moves
        while left > 0:
            done = _chain.run(
                self.setup.data, self.setup.target, self.setup.table, self.state, self.work,
                min(left, PORTION), every, self.walk, self.mix, self.rng,
            )  # fmt: skip
            left -= done
            if self.state.number[0] > len(self.state.share) - 2:
                self._grow()

    def _grow(self) -> None:
        room = 2 * len(self.state.share)
        centres, share = np.zeros((room, 2)), np.zeros(room)
        number = self.state.number[0]
        centres[:number], share[:number] = self.state.centres[:number], self.state.share[:number]
        self.state = self.state._replace(centres=centres, share=share)
        self._work_arrays()

    def adapt(self) -> None:
        """Tune the walks towards one acceptance in three, and the mix of moves; only before recording."""
        tried, taken = self.state.tried, self.state.taken
        births = taken[_moves.BIRTH] / max(tried[_moves.BIRTH], 1)
        # where births are easy they also carry centres about, and their number is what moves slowly
        self.mix[:] = OVERLAPPING if births > 0.2 else APART
        for k, move in enumerate((_moves.RESCALE, _moves.BACKGROUND)):
            if tried[move] >= 20:
                rate = taken[move] / tried[move]
                self.walk[k] = float(np.clip(self.walk[k] * np.exp(2.0 * (rate - 0.35)), 1e-3, 2.0))
        tried[:] = 0
        taken[:] = 0

    def record(self) -> None:
        """Keep the present state, with memberships drawn."""
        s = self.state
        owner = np.empty(self.setup.n, np.int32)
        _chain.draw_members(self.setup.data, self.setup.target, s, owner, self.work.density, self.rng)
        back = np.empty_like(owner)
        back[self.setup.order] = owner
        number = int(s.number[0])
        self.records.append(
            (s.centres[:number].copy(), float(s.scalars[_moves.SCALE]), float(s.scalars[_moves.ETA]), back)
        )


def _target(start: ClusterModel, priors: Priors | None) -> _moves.Target:
    rho = priors.parent_intensity if priors is not None else None
    mu = priors.mean_offspring if priors is not None else None
    log_scale = priors.log_scale if priors is not None else (0.0, 1.0)
    background = priors.background if priors is not None else None
    return _moves.Target(
        kernel=start.kernel_code,
        reach=start.reach_in_scales,
        known=rho is None or mu is None,
        free_scale=priors is not None and priors.scale_bounds[0] < priors.scale_bounds[1],
        rho=start.parent_intensity,
        mu=start.mean_offspring,
        rho_shape=rho[0] if rho is not None else 1.0,
        rho_rate=rho[1] if rho is not None else 0.0,
        mu_shape=mu[0] if mu is not None else 1.0,
        mu_rate=mu[1] if mu is not None else 0.0,
        log_scale_mean=log_scale[0],
        log_scale_sd=log_scale[1],
        with_background=background is not None,
        background_mean=background if background is not None else 1.0,
        uniform_share=UNIFORM_SHARE,
    )


def _sorted_data(
    local_xy: Floats, area: StudyArea, wide: StudyArea, scale: float, reach: float
) -> tuple[_moves.Data, npt.NDArray[np.int32]]:
    x, y = np.ascontiguousarray(local_xy[:, 0]), np.ascontiguousarray(local_xy[:, 1])
    n = len(x)
    left, bottom = (float(x.min()), float(y.min())) if n else (0.0, 0.0)
    width, height = (float(np.ptp(x)), float(np.ptp(y))) if n else (0.0, 0.0)
    cell = max(CELL_IN_SCALES * scale, np.sqrt(width * height / (n + 16.0)), 1e-9)
    if reach * scale > np.hypot(width, height):
        # every centre reaches every point: one long row
        cell = max(width, height) + 1.0
    columns, rows = int(width / cell) + 1, int(height / cell) + 1
    order, first = cell_order(x, y, left, bottom, cell, columns, rows)
    shift = wide.origin - area.origin
    grid = wide.grid
    grid = grid._replace(
        x0=grid.x0 + shift[0], x1=grid.x1 + shift[0], y0=grid.y0 + shift[1], y1=grid.y1 + shift[1],
        left=float(grid.left + shift[0]), bottom=float(grid.bottom + shift[1]),
    )  # fmt: skip
    data = _moves.Data(
        x[order], y[order], first, left, bottom, float(cell), columns, rows,
        grid, wide._live_cells, wide.area, area.area, np.empty((0, 0)),
    )  # fmt: skip
    return data, order


def collect(setup: ChainSetup, chains: list[Chain], rng: np.random.Generator) -> Draws:
    """Put the records of all chains together, and draw the intensities that were integrated out."""
    m = min(len(c.records) for c in chains)
    shape = (len(chains), m)
    draws = Draws(
        np.zeros(shape, np.int64), np.zeros(shape, np.int64), np.zeros(shape), np.zeros(shape),
        np.zeros(shape), np.zeros(shape), [], np.zeros((*shape, setup.n), np.int32),
    )  # fmt: skip
    target = setup.target
    for a, chain in enumerate(chains):
        kept = []
        for b in range(m):
            centres, scale, eta, owner = chain.records[b]
            kept.append(centres)
            draws.number_all[a, b] = len(centres)
            draws.number_inside[a, b] = int(setup.area.local_contains(centres).sum())
            draws.scale[a, b], draws.background[a, b] = scale, eta
            draws.owner[a, b] = owner
            if target.known:
                draws.parent_intensity[a, b] = target.rho
                draws.mean_offspring[a, b] = target.mu
        draws.centres.append(kept)
    if not target.known:
        exposure = np.array([[_exposure(setup, r) for r in c.records[:m]] for c in chains])
        draws.parent_intensity = rng.gamma(
            draws.number_all + target.rho_shape, 1.0 / (setup.wide.area + target.rho_rate)
        )
        draws.mean_offspring = rng.gamma(
            setup.n + target.mu_shape, 1.0 / (exposure + draws.background * setup.area.area + target.mu_rate)
        )
        # the background was in units of the mean offspring; from here on it is points per m²
        draws.background = draws.background * draws.mean_offspring
    tried = np.sum([c.state.tried for c in chains], axis=0)
    taken = np.sum([c.state.taken for c in chains], axis=0)
    draws.acceptance = {name: float(taken[k] / tried[k]) for k, name in enumerate(MOVES) if tried[k] > 0}
    return draws


def _exposure(setup: ChainSetup, record: tuple[Floats, float, float, Ints]) -> float:
    centres, scale, _, _ = record
    return float(sum_of_shares(setup.table, centres, scale))


def run_chains(
    setup: ChainSetup,
    *,
    chains: int,
    warm_up: int,
    draws: int,
    moves_per_draw: int,
    every: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
) -> list[Chain]:
    """Run chains side by side, in rounds short enough to show progress and to be stopped."""
    running = [Chain(setup, seed) for seed in rng.spawn(chains)]
    rounds = 20

    def warm(chain: Chain) -> None:
        chain.advance(max(warm_up * moves_per_draw // rounds, 1), every)
        chain.adapt()

    for _ in range(rounds):
        for _ in in_order(warm, running, workers):
            pass
    extend(
        running, draws=draws, moves_per_draw=moves_per_draw, every=every, workers=workers, progress=progress
    )
    return running


def extend(
    running: list[Chain],
    *,
    draws: int,
    moves_per_draw: int,
    every: int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> None:
    """Record `draws` further draws from every chain."""
    portion = max(1, draws // 20)
    done = 0
    while done < draws:
        count = min(portion, draws - done)

        def work(chain: Chain, count: int = count) -> None:
            for _ in range(count):
                chain.advance(moves_per_draw, every)
                chain.record()

        for _ in in_order(work, running, workers):
            pass
        done += count
        if progress is not None:
            progress("posterior sampling", done, draws)
