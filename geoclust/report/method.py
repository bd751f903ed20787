"""Methods and formulas with their sources, for the specialist."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from geoclust.fitting.result import ClusterFit


@dataclass(frozen=True)
class Step:
    """One step of the analysis: what was done, its formulas, where they were published."""

    name: str
    text: str
    formulas: tuple[str, ...]
    source: str


_CURVES = Step(
    "Curves",
    "Pairs of points are counted by distance. For the envelopes each pair is weighted by the inverse of the "
    "set covariance γ̄(d): the area common to the study area and its copy shifted by the distance d of the "
    "pair, averaged over directions. For the fit it is weighted by the inverse of the share of the circle "
    "round its first point, through its second, that lies in the study area. Both are computed exactly for "
    "the drawn boundary with its holes and parts. The bandwidth of the kernel of g is 0.15 mean spacings "
    "unless it was set; the squared intensity is estimated by n(n − 1)/|W|⁠².",
    (
        "K(r) = |W|² / n(n − 1) · Σ 1(d ≤ r) / γ̄(d)",
        "K(r) = |W|² / (n(n − 1) |W⁽ʳ⁾|) · Σ 1(d ≤ r) / share(x, d)",
        "L(r) = √(K(r)/π)",
        "g(r) as K, with k(r − d) / 2πd in place of 1(d ≤ r)",
    ),
    "Ripley 1977; Besag 1977; Ohser 1983; Stoyan & Stoyan 1994; Guan 2007",
)
_TERRAIN = Step(
    "Covariates",
    "The density of the points is log-linear in the covariates, fitted by the Poisson likelihood with a "
    "quadrature over cells whose area inside the study area is exact; its standard errors allow for the "
    "clusters. In curves beyond the covariates every pair is weighted by one over the fitted density at its "
    "two places; patterns of that density alone, fitted anew each, give the envelope. Clusters are those "
    "beyond the covariates: centres as likely everywhere, their points thinned in proportion to the fitted "
    "density, which is taken as known there.",
    ("λ(x) = exp(β₀ + Σ βⱼ zⱼ(x))",),
    "Baddeley, Møller & Waagepetersen 2000; Waagepetersen 2007; Baddeley et al. 2014",
)
_TEST = Step(
    "Test of complete randomness",
    "Random patterns with the same number of points are drawn in the same study area; curves are ordered by "
    "extreme "
    "rank length, which gives one p-value over all distances and an envelope that a random pattern leaves "
    "with a "
    "probability of 5 % only.",
    (),
    "Myllymäki et al. 2017",
)
_CONTRAST = Step(
    "Fit",
    "The parameters are those whose curve is nearest to the survey's, by minimum contrast with several "
    "starts. The "
    "intervals come from a parametric bootstrap: patterns are drawn from the fit in the same study area and "
    "fitted "
    "again, choice of the range included; the middle 95 % of the new values are the interval.",
    ("D(θ) = ∫ |T̂(r)^q − T(r; θ)^q|² dr",),
    "Diggle & Gratton 1984",
)
_POSTERIOR = Step(
    "Fit",
    "Centres, the membership of the points and the parameters are sampled together, in proportion to their "
    "posterior probability: centres are born, die, move, split and merge; intensities are drawn from their "
    "Gamma "
    "conditionals, the spread by a step of its own. A minimum contrast fit gives the values to start from. "
    "Estimates "
    "are posterior medians, intervals the middle 95 % of the draws; the priors are listed among the choices "
    "of the fit. "
    "The expected share of each cluster that falls into the study area is exact.",
    ("C ~ Poisson(ρ) on W widened;  X | C ~ Poisson(ε + μ Σ k(x − c)) on W",),
    "Møller & Waagepetersen 2004; van Lieshout & Baddeley 2002; Diggle & Gratton 1984; Geyer & Møller 1994; "
    "Green 1995",
)
_BOOTSTRAP = (
    " The intervals come from a parametric bootstrap: patterns are drawn from the fit in the same study area "
    "and fitted again, choice of the range included; the middle 95 % of the new values are the interval."
)
_PALM = Step(
    "Fit",
    "The parameters maximise the Palm likelihood: the other points seen from each point count as a Poisson "
    "process, as dense as the pair correlation function of the model says, up to the distance R. The share "
    "of the surroundings of each point that lies in the study area is exact. The intensity is n/|W|."
    + _BOOTSTRAP,
    ("ℓ(θ) = Σ ln(λ g(d; θ)) − λ Σ ∫₀ᴿ g(r; θ) 2πr share(x, r) dr, over pairs with d < R and points x",),
    "Tanaka, Ogata & Stoyan 2008",
)
_COMPOSITE = Step(
    "Fit",
    "The parameters maximise a second-order composite likelihood: the probability of the distances of all "
    "pairs of points up to R, as if pairs were independent of each other. The set covariance γ̄ of the study "
    "area, averaged over directions, is exact." + _BOOTSTRAP,
    ("ℓ(θ) = Σ ln g(d; θ) − m ln ∫₀ᴿ g(r; θ) 2πr γ̄(r) dr, over the m ordered pairs with d < R",),
    "Guan 2006",
)
_SAMPLED = Step(
    "Centres",
    "The maps and numbers are averages over the same posterior sample; their intervals hold the uncertainty "
    "of the "
    "parameters as well.",
    (),
    "Møller & Waagepetersen 2004",
)
_CENTRES = Step(
    "Centres",
    "Given the fitted parameters, configurations of centres inside the study area and round it are sampled "
    "in "
    "proportion to their posterior probability by births, deaths, moves, splits and merges. The expected "
    "share of each "
    "cluster that falls into the study area is exact. Averages over the sample give the maps and the "
    "numbers; their "
    "intervals do not hold the uncertainty of the parameters themselves.",
    ("C ~ Poisson(ρ) on W widened;  X | C ~ Poisson(μ Σ k(x − c)) on W",),
    "van Lieshout & Baddeley 2002; Møller & Waagepetersen 2004; Geyer & Møller 1994; Green 1995",
)
_CLUSTERS = Step(
    "Clusters",
    "Of all ways to divide the points into clusters the one with the least expected loss is shown: the "
    "fewest pairs "
    "wrongly joined or separated, on average over the sample.",
    (),
    "Binder 1978; Dahl 2006",
)
_AGREE = Step(
    "Agreement of the runs",
    "Several runs start far apart; they count as agreeing when the rank-normalised R̂ is below 1.01 and the "
    "effective "
    "sample size above 400.",
    (),
    "Vehtari et al. 2021",
)

_SECOND_LEVEL = Step(
    "Test of the second level",
    "A second level always brings the model nearer to the curve. How much nearer by chance alone is seen in "
    "patterns simulated from the best single level, to which both are fitted as well, over a short range "
    "(has a cluster parts?) and a long one (do clusters lie in groups?); simulation stops once ten of them "
    "have reached the survey's drop of the contrast over each.",
    (),
    "Besag & Clifford 1991",
)

_FITS = {
    "minimum-contrast": _CONTRAST,
    "posterior": _POSTERIOR,
    "palm": _PALM,
    "composite-likelihood": _COMPOSITE,
}

_MODELS: dict[str, tuple[str, tuple[str, ...]]] = {
    "thomas": (
        "Centres lie at random, ρ per unit area; each has a Poisson number of points with mean μ, scattered "
        "round it as "
        "a Gaussian with standard deviation σ per axis.",
        ("g(r) = 1 + exp(−r²/4σ²) / (4πσ²ρ)", "K(r) = πr² + (1 − exp(−r²/4σ²)) / ρ", "λ = ρμ"),
    ),
    "matern-cluster": (
        "Centres lie at random, ρ per unit area; each has a Poisson number of points with mean μ, spread "
        "evenly over a disc of radius R round it.",
        (
            "g(r) = 1 + 2 (arccos z − z √(1 − z²)) / (π²R²ρ), z = r/2R, for r ≤ 2R",
            "g(r) = 1 beyond",
            "λ = ρμ",
        ),
    ),
    "cauchy": (
        "Centres lie at random, ρ per unit area; each has a Poisson number of points with mean μ, half of "
        "them within 1.73 ω of it but one in ten further out than 10 ω. Centres far outside the study area "
        "therefore still send points into it: those beyond the margin that was sampled count by their mean.",
        (
            "g(r) = 1 + (1 + r²/4ω²)^(−3/2) / (8πω²ρ)",
            "K(r) = πr² + (1 − (1 + r²/4ω²)^(−1/2)) / ρ",
            "λ = ρμ",
        ),
    ),
    "nested-thomas": (
        "Outer centres lie at random, ρ₁ per unit area; each has a Poisson number of inner centres, "
        "scattered round it as a Gaussian with standard deviation σ₁ per axis; each of the inner centres, "
        "ρ₂ per unit area in all, has a Poisson number of points with mean μ, scattered round it with σ₂.",
        (
            "g(r) = 1 + N(r; 2σ₂²)/ρ₂ + N(r; 2σ₁² + 2σ₂²)/ρ₁",
            "N(r; v) = exp(−r²/2v) / 2πv",
            "λ = ρ₂μ",
        ),
    ),
    "variance-gamma": (
        "Centres lie at random, ρ per unit area; each has a Poisson number of points with mean μ, scattered "
        "round it as a Gaussian whose variance follows a gamma distribution of shape ν′ + 1.",
        (
            "g(r) = 1 + (r/η)^ν K_ν(r/η) / (π 2^(ν+1) η² Γ(ν + 1) ρ), ν = 2ν′ + 1",
            "K(r) = πr² + (1 − (r/η)^(ν+1) K_(ν+1)(r/η) / (2^ν Γ(ν + 1))) / ρ",
            "λ = ρμ",
        ),
    ),
}
_ANY_MODEL = (
    "Centres lie at random, ρ per unit area; each has a Poisson number of points with mean μ. The distance "
    "between two "
    "points of a cluster has density h and distribution H.",
    ("g(r) = 1 + h(r)/ρ", "K(r) = πr² + H(r)/ρ", "λ = ρμ"),
)


def steps(fit: ClusterFit | None, located: bool, covariates: bool = False) -> list[Step]:
    """The steps that were taken."""
    out = [_CURVES, _TEST]
    if covariates:
        out.append(_TERRAIN)
    if fit is not None:
        text, formulas = _MODELS.get(fit.model.name, _ANY_MODEL)
        out.append(Step(f"Model: {fit.model.name.replace('-', ' ')}", text, formulas, fit.model.source))
        if fit.method in _FITS:
            out.append(_FITS[fit.method])
        if "second_level_p_value" in fit.choices:
            out.append(_SECOND_LEVEL)
    if located:
        together = fit is not None and fit.sample is not None
        out += [_SAMPLED if together else _CENTRES, _CLUSTERS, _AGREE]
    return out


REFERENCES: tuple[str, ...] = (
    "Besag J, Clifford P (1991) Sequential Monte Carlo p-values. Biometrika 78: 301–304",
    "Baddeley A, Møller J, Waagepetersen R (2000) Non- and semi-parametric estimation of interaction in "
    "inhomogeneous point patterns. Statistica Neerlandica 54: 329–350",
    "Baddeley A, Coeurjolly J-F, Rubak E, Waagepetersen R (2014) Logistic regression for spatial Gibbs point "
    "processes. Biometrika 101: 377–392",
    "Baddeley A, Hardegen A, Lawrence T, Milne RK, Nair G, Rakshit S (2017) On two-stage Monte Carlo tests "
    "of composite hypotheses. Computational Statistics and Data Analysis 114: 75–87",
    "Besag J (1977) Discussion of Ripley. Journal of the Royal Statistical Society B 39: 193–195",
    "Binder DA (1978) Bayesian cluster analysis. Biometrika 65: 31–38",
    "Dahl DB (2006) Model-based clustering for expression data via a Dirichlet process mixture model. In: "
    "Bayesian "
    "inference for gene expression and proteomics. Cambridge University Press",
    "Diggle PJ (1983) Statistical analysis of spatial point patterns. Academic Press",
    "Diggle PJ, Gratton RJ (1984) Monte Carlo methods of inference for implicit statistical models. Journal "
    "of the "
    "Royal Statistical Society B 46: 193–227",
    "Geyer CJ, Møller J (1994) Simulation procedures and likelihood inference for spatial point processes. "
    "Scandinavian Journal of Statistics 21: 359–373",
    "Green PJ (1995) Reversible jump Markov chain Monte Carlo computation and Bayesian model determination. "
    "Biometrika 82: 711–732",
    "Guan Y (2006) A composite likelihood approach in fitting spatial point process models. Journal of the "
    "American Statistical Association 101: 1502–1512",
    "Guan Y (2007) A least-squares cross-validation bandwidth selection approach in pair correlation "
    "function "
    "estimations. Statistics and Probability Letters 77: 1722–1729",
    "Jalilian A, Guan Y, Waagepetersen R (2013) Decomposition of variance for spatial Cox processes. "
    "Scandinavian Journal of Statistics 40: 119–137",
    "Matérn B (1960) Spatial variation. Meddelanden från Statens Skogsforskningsinstitut 49 (5): 1–144",
    "Møller J, Waagepetersen RP (2004) Statistical inference and simulation for spatial point processes. "
    "Chapman & Hall",
    "Myllymäki M, Mrkvička T, Grabarnik P, Seijo H, Hahn U (2017) Global envelope tests for spatial "
    "processes. Journal "
    "of the Royal Statistical Society B 79: 381–404",
    "Ohser J (1983) On estimators for the reduced second moment measure of point processes. Mathematische "
    "Operationsforschung und Statistik, Series Statistics 14: 63–71",
    "Ripley BD (1977) Modelling spatial patterns. Journal of the Royal Statistical Society B 39: 172–212",
    "Stoyan D, Stoyan H (1996) Estimating pair correlation functions of planar cluster processes. "
    "Biometrical Journal 38: 259–271",
    "Stoyan D, Stoyan H (1994) Fractals, random shapes and point fields. Wiley",
    "Tanaka U, Ogata Y, Stoyan D (2008) Parameter estimation and model selection for Neyman-Scott point "
    "processes. Biometrical Journal 50: 43–57",
    "Thomas M (1949) A generalization of Poisson's binomial limit for use in ecology. Biometrika 36: 18–25",
    "van Lieshout MNM, Baddeley AJ (2002) Extrapolating and interpolating spatial patterns. In: Spatial "
    "cluster "
    "modelling. Chapman & Hall",
    "Waagepetersen RP (2007) An estimating function approach to inference for inhomogeneous Neyman-Scott "
    "processes. Biometrics 63: 252–258",
    "Vehtari A, Gelman A, Simpson D, Carpenter B, Bürkner P-C (2021) Rank-normalization, folding, and "
    "localization: an "
    "improved R̂ for assessing convergence of MCMC. Bayesian Analysis 16: 667–718",
)


def references(taken: list[Step]) -> list[str]:
    """The references that the steps cite, by first author and year."""
    cited = " ".join(step.source for step in taken)
    return [r for r in REFERENCES if _cited(r, cited)]


def _cited(reference: str, cited: str) -> bool:
    year = reference[reference.index("(") + 1 : reference.index(")")]
    first = reference.split(",")[0].split("(")[0].rsplit(" ", 1)[0] if "," in reference.split("(")[0] else (
        reference.split("(")[0].strip().rsplit(" ", 1)[0])  # fmt: skip
    return any(first in piece and year in piece for piece in cited.split(";"))
