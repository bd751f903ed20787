"""Which model predicts best: parts of the survey are held out and predicted from the rest."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.special import gammaln, logsumexp

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import CannotTell, UsageError, not_allowed
from geoclust.fitting import status as verdicts
from geoclust.fitting._tile_scores import log_density
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.fitting.posterior import default_priors, sample_posterior, starting_model
from geoclust.fitting.sampling import Draws
from geoclust.fitting.shares import heavy_tailed, share_table
from geoclust.fitting.tiles import Tiles, cut_into_tiles
from geoclust.models.base import ClusterModel
from geoclust.models.catalogue import model_by_name
from geoclust.workers import in_order

if TYPE_CHECKING:
    import pandas as pd

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

RANDOM = "complete-randomness"
# clusters that a tile holds on average, and bounds of the number of tiles
CLUSTERS_PER_TILE = 1.0
FEWEST_TILES, MOST_TILES = 12, 100
FOLDS = 6
# draws that the predictions are averaged over, and parts of them that tell how well
DRAWS = 400
PARTS = 8
# shorter runs than those of a fit: the average over draws forgives more than an interval
ENOUGH = 100.0
ROUNDS = 2
CHAINS = 4


@dataclass(frozen=True, eq=False)
class ModelComparison:
    """Scores of models on held-out tiles.

    Attributes
    ----------
    models
        Their names, complete randomness included.
    scores
        (tiles, models) log predictive density of the points of each tile given those outside its fold.
    monte_carlo_errors
        (tiles, models) standard errors of the scores that come from simulation.
    tiles
        The tiles, with the fold of each.
    """

    models: tuple[str, ...]
    scores: Floats
    monte_carlo_errors: Floats
    tiles: Tiles

    @property
    def best(self) -> str:
        """The model with the largest score."""
        return self.models[int(np.argmax(self.scores.sum(axis=0)))]

    def difference(self, better: str, worse: str) -> tuple[float, float]:
        """Score of one model over another's, and its standard error from the differences tile by tile.

        The error holds that of the simulation.
        """
        for name in (better, worse):
            if name not in self.models:
                raise not_allowed("model", self.models, name)
        a, b = (self.models.index(name) for name in (better, worse))
        each = self.scores[:, a] - self.scores[:, b]
        return float(each.sum()), float(np.sqrt(len(each)) * each.std(ddof=1))

    def told_apart(self, one: str, other: str) -> bool:
        """Whether two models differ by more than two standard errors."""
        difference, error = self.difference(one, other)
        return abs(difference) > 2.0 * error

    def to_frame(self) -> pd.DataFrame:
        """One row a model, the best first: score, difference to the best, standard errors."""
        import pandas as pd

        rows = []
        for k in np.argsort(-self.scores.sum(axis=0), kind="stable"):
            difference, error = self.difference(self.best, self.models[k])
            rows.append(
                {
                    "model": self.models[k],
                    "score": float(self.scores[:, k].sum()),
                    "below_best": difference,
                    "standard_error": error,
                    "monte_carlo_error": float(np.sqrt((self.monte_carlo_errors[:, k] ** 2).sum())),
                }
            )
        return pd.DataFrame(rows)

    def sentences(self) -> list[str]:
        """What the scores say, one sentence for each model but the best."""
        best = self.best
        lines = []
        for name in self.to_frame()["model"]:
            if name == best:
                continue
            difference, error = self.difference(best, name)
            figures = f"log score {difference:.1f} apart, standard error {error:.1f}"
            if self.told_apart(best, name):
                than = f"better by {_named(best)} than by {_named(name)}"
                lines.append(f"Held-out ground is predicted {than} ({figures}).")
            else:
                lines.append(f"The data do not tell {_named(best)} and {_named(name)} apart ({figures}).")
        return lines

    def record(self) -> dict[str, object]:
        """The comparison as plain values."""
        return {
            "best": self.best,
            "tiles": len(self.tiles.areas),
            "folds": int(self.tiles.fold.max()) + 1,
            "models": self.to_frame().to_dict("records"),
            "sentences": self.sentences(),
        }

    def __repr__(self) -> str:
        return f"<ModelComparison on {len(self.scores)} tiles>\n{self.to_frame().to_string(index=False)}"


def _named(model: str) -> str:
    return model.replace("-", " ")


def compare_models(
    survey: Survey,
    models: Sequence[str] = ("thomas", "matern-cluster"),
    *,
    tiles: int | None = None,
    folds: int = FOLDS,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> ModelComparison:
    """Compare models by how well they predict parts of the survey from the rest.

    The study area is cut into compact tiles of about the same area. Those of one fold, far
    apart, are held out together; the posterior of each model is sampled on the study
    area without them. A tile is scored by the logarithm of the predictive density of all its
    points, given those of the rest: averaged over the draws, with clusters that reach
    across the edge of the tile and clusters of which the rest shows nothing. That score is
    proper: on average none is larger than that of the true model.

    Parameters
    ----------
    survey
        Points and study area.
    models
        Names of models whose posterior can be sampled; complete randomness is always compared as well.
    tiles
        Number of tiles, at least 8; by default about one for each cluster, 12 to 100.
    folds
        Number of folds, 2 up to the number of tiles.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.

    Returns
    -------
    ModelComparison

    Raises
    ------
    CannotTell
        If there are too few points.
    UsageError
        If an argument is not allowed.
    """
    kinds = comparable(models)
    if tiles is not None and tiles < 8:
        raise not_allowed("tiles", "at least 8", tiles)
    if folds < 2:
        raise not_allowed("folds", "at least 2", folds)
    seeds = np.random.default_rng(rng).spawn(len(kinds))
    starts = [_start(survey, kind) for kind in kinds]
    count = _tile_count(survey, starts) if tiles is None else tiles
    cut = cut_into_tiles(survey.area, count, min(folds, count))
    home = cut.find(survey.local_xy)
    fewest = min(int((cut.fold[home] != f).sum()) for f in range(cut.fold.max() + 1))
    if fewest < verdicts.FEWEST_POINTS:
        needed = verdicts.FEWEST_POINTS
        raise CannotTell(
            "too-few-points",
            f"Only {fewest} points are left where a part of the survey is held out; at least {needed} are "
            "needed to compare models.",
        )
    columns, errors = [_random_scores(survey, cut, home)], [np.zeros(count)]
    done, total = 0, len(kinds) * (int(cut.fold.max()) + 1)
    for start, seed in zip(starts, seeds, strict=True):
        column, error = np.empty(count), np.empty(count)
        for fold, fold_seed in enumerate(seed.spawn(int(cut.fold.max()) + 1)):
            held = np.flatnonzero(cut.fold == fold)
            found = _score_fold(survey, cut, home, held, start, fold_seed, workers)
            column[held], error[held] = found
            done += 1
            if progress is not None:
                progress("held-out tiles", done, total)
        columns.append(column)
        errors.append(error)
    names = (RANDOM, *(kind.name for kind in kinds))
    return ModelComparison(names, np.column_stack(columns), np.column_stack(errors), cut)


def comparable(models: Sequence[str]) -> list[type[ClusterModel]]:
    """The models to compare, complete randomness left out, or one sentence on why they cannot be."""
    if isinstance(models, str) or len(set(models)) != len(models):
        raise not_allowed("models", "a list of different names", models)
    kinds = [model_by_name(name) for name in models if name != RANDOM]
    if not kinds:
        raise not_allowed("models", "at least one besides complete randomness", models)
    for kind in kinds:
        if not kind.sampled or heavy_tailed(kind):
            raise UsageError(
                f"The model {kind.name} cannot be compared, as held-out ground cannot be predicted with it; "
                "compare models such as thomas and matern-cluster."
            )
    return kinds


def _start(survey: Survey, kind: type[ClusterModel]) -> ClusterModel:
    """Where the chains of every fold start: a contrast fit."""
    if survey.n < verdicts.FEWEST_POINTS:
        reason = verdicts.sentence("too-few-points", n=survey.n, fewest=verdicts.FEWEST_POINTS)
        raise CannotTell("too-few-points", reason)
    pilot = fit_points(kind, survey.local_xy, survey.area, ContrastChoices())
    return starting_model(pilot, survey, default_priors(survey.n, survey.area))


def _tile_count(survey: Survey, starts: list[ClusterModel]) -> int:
    clusters = min(start.parent_intensity for start in starts) * survey.area.area
    count = int(np.clip(round(clusters / CLUSTERS_PER_TILE), FEWEST_TILES, MOST_TILES))
    return max(min(count, survey.n // 4), 8)


def _random_scores(survey: Survey, cut: Tiles, home: npt.NDArray[np.int64]) -> Floats:
    """Constant intensity with an exponential prior whose mean is that of the survey, in closed form."""
    out = np.empty(len(cut.areas))
    for k, area in enumerate(cut.areas):
        others = np.flatnonzero(cut.fold == cut.fold[k])
        rest = survey.area.area - sum(cut.areas[j].area for j in others)
        shape = 1.0 + int((~np.isin(home, others)).sum())
        rate = rest + 1.0 / survey.intensity
        n = int((home == k).sum())
        out[k] = gammaln(shape + n) - gammaln(shape) + shape * np.log(rate) - (shape + n) * np.log(
            rate + area.area
        )  # fmt: skip
    return out


def _score_fold(
    survey: Survey,
    cut: Tiles,
    home: npt.NDArray[np.int64],
    held: npt.NDArray[np.int64],
    start: ClusterModel,
    rng: np.random.Generator,
    workers: int | None,
) -> tuple[Floats, Floats]:
    """Scores of the tiles of one fold and their Monte Carlo errors."""
    sample_seed, *tile_seeds = rng.spawn(1 + len(held))
    rest = cut.without(held)
    kept = survey.local_xy[~np.isin(home, held)]
    sample = sample_posterior(
        kept + (survey.area.origin - rest.origin), rest, start, default_priors(survey.n, survey.area),
        chains=CHAINS, enough=ENOUGH, most_rounds=ROUNDS, rng=sample_seed, workers=workers,
    )  # fmt: skip
    centres, first, draws = occupied(sample.draws, rest.origin - survey.area.origin)
    scorer = TileScorer(type(start), survey.area, rest, centres, first, draws, workers)

    def one(task: tuple[int, np.random.Generator]) -> tuple[float, float]:
        k, seed = task
        return average(scorer.log_densities(cut.areas[k], survey.local_xy[home == k], seed))

    found = list(in_order(one, list(zip(held.tolist(), tile_seeds, strict=True)), workers))
    return np.array([f[0] for f in found]), np.array([f[1] for f in found])


def occupied(draws: Draws, shift: Floats) -> tuple[Floats, npt.NDArray[np.int64], Floats]:
    """Centres with points, draw by draw, and the parameters, of at most `DRAWS` draws evenly kept.

    Returns
    -------
    centres : ndarray, (m, 2)
        Moved by `shift`.
    start : ndarray of int, (d + 1,)
        Where the centres of each draw begin.
    parameters : ndarray, (d, 4)
        Scale, parent intensity, mean offspring, background.
    """
    chains, number = draws.scale.shape
    each = max(DRAWS // chains, 1)
    taken = np.unique(np.linspace(0, number - 1, min(each, number)).round().astype(int))
    parts, first, rows = [], [0], []
    for a in range(chains):
        for b in taken:
            owners = np.unique(draws.owner[a, b])
            parts.append(draws.centres[a][b][owners[owners >= 0]] + shift)
            first.append(first[-1] + len(parts[-1]))
            rows.append((draws.scale[a, b], draws.parent_intensity[a, b], draws.mean_offspring[a, b],
                         draws.background[a, b]))  # fmt: skip
    return np.concatenate(parts), np.array(first, np.int64), np.array(rows)


class TileScorer:
    """Predictive densities of tiles from draws on the rest.

    Parameters
    ----------
    kind
        The model.
    area
        The survey's study area, whose local coordinates are used throughout.
    rest
        What the draws are given.
    centres, start, draws
        From `occupied`.
    """

    def __init__(
        self,
        kind: type[ClusterModel],
        area: StudyArea,
        rest: StudyArea,
        centres: Floats,
        start: npt.NDArray[np.int64],
        draws: Floats,
        workers: int | None = None,
    ) -> None:
        self.kind, self.area, self.rest = kind, area, rest
        self.centres, self.start, self.draws = centres, start, draws
        low, high = float(draws[:, 0].min()), float(draws[:, 0].max())
        self.scales = (low, max(high, low * 1.0001))
        self.reach = kind.reach_in_scales * high
        # nodes of the integrals lie within reach of a tile, which may stick out of the box of the rest
        outside = np.abs(np.array(area.bounds) - np.array(rest.bounds)).max()
        self.rest_table = share_table(kind, rest, float(outside) + 1.1 * self.reach, self.scales, workers)

    def log_densities(self, tile: StudyArea, points: Floats, rng: np.random.Generator) -> Floats:
        """Log density of the points of a tile, local coordinates of the survey, by parts of the draws.

        Parameters
        ----------
        tile
            The tile.
        points
            (n, 2)
        rng
            Generator.

        Returns
        -------
        ndarray, (PARTS,)
            Parts are of the same size but for one draw.
        """
        shift = self.area.origin - tile.origin
        table = share_table(self.kind, tile, 1.1 * self.reach, self.scales, 1)
        box = np.array(tile.bounds) - np.tile(self.area.origin, 2)
        centres, start = self._near(box)
        shifts = np.vstack([self.area.origin - self.rest.origin, shift])
        row = np.ascontiguousarray(in_a_row(points))
        out = np.empty(PARTS)
        for k, part in enumerate(np.array_split(np.arange(len(self.draws)), PARTS)):
            out[k] = log_density(
                self.kind.kernel_code, self.kind.reach_in_scales, row, box, tile.area, self.rest_table, table,
                shifts, centres, start[part[0] : part[-1] + 2], self.draws[part], rng,
            )  # fmt: skip
        return out

    def _near(self, box: Floats) -> tuple[Floats, npt.NDArray[np.int64]]:
        """The centres within reach of a tile, draw by draw."""
        c = self.centres
        near = (c[:, 0] > box[0] - self.reach) & (c[:, 0] < box[2] + self.reach)
        near &= (c[:, 1] > box[1] - self.reach) & (c[:, 1] < box[3] + self.reach)
        before = np.concatenate([[0], np.cumsum(near)])
        return np.ascontiguousarray(c[near]), before[self.start].astype(np.int64)


def in_a_row(points: Floats) -> Floats:
    """Points in an order in which each is followed by the nearest one left, so clusters stay together."""
    left = list(range(1, len(points)))
    order = [0] if len(points) else []
    while left:
        away = np.hypot(*(points[left] - points[order[-1]]).T)
        order.append(left.pop(int(np.argmin(away))))
    return points[order].reshape(-1, 2)


def average(values: Floats) -> tuple[float, float]:
    """Logarithm of the mean of exp(values), and its standard error by leaving out parts of the draws."""
    parts = np.array_split(values, PARTS)
    whole = float(logsumexp(values) - np.log(len(values)))
    sums = np.array([logsumexp(p) for p in parts])
    sizes = np.array([len(p) for p in parts])
    left_out = np.array(
        [logsumexp(np.delete(sums, k)) - np.log(sizes.sum() - sizes[k]) for k in range(PARTS)]
    )
    return whole, float(np.sqrt((PARTS - 1) / PARTS * np.sum((left_out - left_out.mean()) ** 2)))
