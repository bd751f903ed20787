"""What a whole analysis found, and the answer in a few lines."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from geoclust.area.survey import Survey
from geoclust.centres.result import CentreMap
from geoclust.curves.envelopes import EnvelopeTest
from geoclust.fitting.assessment import Assessment
from geoclust.fitting.result import ClusterFit
from geoclust.terrain import Terrain


@dataclass(frozen=True, eq=False)
class Analysis:
    """What an analysis found.

    Attributes
    ----------
    status, reason
        ``ok``, or why the data cannot tell, and the sentence.
    survey, envelopes, fit, centres
        Results of the steps; None where a step had nothing to say.
    terrain
        What covariates explain, if there were any.
    assessment
        Whether the fitted model reproduces the survey, if there is one.
    choices, seed
        What was chosen on the way.
    out
        Folder that holds the results.
    """

    status: str
    reason: str
    survey: Survey
    envelopes: dict[str, EnvelopeTest]
    fit: ClusterFit | None
    centres: CentreMap | None
    choices: dict[str, object]
    seed: int
    out: Path
    notes: list[str] = field(default_factory=list)
    terrain: Terrain | None = None
    assessment: Assessment | None = None

    def lines(self) -> list[str]:
        """The answer in a few lines of text."""
        survey = self.survey
        out = [
            f"{survey.n:,} points in {survey.area.area / 1e4:,.2f} ha ({survey.intensity * 1e4:.3g} per ha)"
        ]
        if "L" in self.envelopes:
            test = self.envelopes["L"]
            out.append(f"complete randomness: p = {test.p_value:.3g} ({test.simulations} simulations, L)")
        if self.terrain is not None:
            out += self.terrain.lines()
        if self.fit is not None and self.status == "ok":
            for p in self.fit.model.described:
                factor, unit = (1e4, "ha⁻¹") if p.per_area else (1.0, "" if p.unit == "1" else p.unit)
                text = (
                    f"{p.name.replace('_', ' ')}: {self.fit.parameters[p.name] * factor:.4g} {unit}".rstrip()
                )
                if p.name in self.fit.intervals:
                    low, high = self.fit.intervals[p.name]
                    text += f" (95 %: {low * factor:.4g} to {high * factor:.4g})"
                out.append(text)
        if self.assessment is not None:
            out.append(self.assessment.sentence())
        if self.centres is not None:
            mean, low, high = self.centres.interval_inside()
            out.append(f"cluster centres in the study area: {mean:.1f} (95 %: {low:.0f} to {high:.0f})")
            if not self.centres.converged:
                out.append(
                    f"the chains do not agree yet (R-hat {self.centres.r_hat:.3f}, effective sample size "
                    f"{self.centres.effective_sample_size:.0f}): take the map with caution"
                )
        if self.status != "ok":
            out.append(f"cannot tell ({self.status}): {self.reason}")
        return [*out, *self.notes, f"results in {self.out}"]
