"""The methods of the service: what each computes, by which formula, and on whose authority."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated


@dataclass(frozen=True, slots=True)
class Method:
    """A method as an auditor asks for it."""

    name: Annotated[str, "As `provenance.method` of an answer names it, or part of such a method."]
    title: Annotated[str, "In words."]
    formula: Annotated[str, "The formula as text."]
    used_by: Annotated[tuple[str, ...], "Operation ids or charts that use it."]
    references: Annotated[tuple[str, ...], "Keys of the sources."]


METHODS = (
    Method(
        "factors",
        "Control chart factors",
        "d2 = E[W], d3 = SD[W] of the range W of n standard normals by quadrature; "
        "c4 = sqrt(2/(n-1)) Gamma(n/2)/Gamma((n-1)/2); all other factors from these.",
        ("getFactors", "xbar-r", "xbar-s", "individuals"),
        ("tippett-1925", "hartley-1942", "abramowitz-stegun-1964", "iso-7870-2", "astm-e2587"),
    ),
    Method(
        "mean-range",
        "Within-subgroup sigma from ranges",
        "sigma = sum f_i (R_i/d2(n_i)) / sum f_i, f_i = (d2(n_i)/d3(n_i))^2; R-bar/d2 where sizes agree.",
        ("xbar-r", "xbar-s"),
        ("burr-1969", "patnaik-1950"),
    ),
    Method(
        "mean-sd",
        "Within-subgroup sigma from standard deviations",
        "sigma = sum h_i (S_i/c4(n_i)) / sum h_i, h_i = c4^2/(1-c4^2); S-bar/c4 where sizes agree.",
        ("xbar-r", "xbar-s"),
        ("burr-1969",),
    ),
    Method(
        "pooled-sd",
        "Within-subgroup sigma from pooled variances",
        "sigma = sqrt(sum (n_i-1) S_i^2 / nu) / c4(nu+1), nu = sum (n_i-1).",
        ("xbar-r", "xbar-s", "assessMeasurements"),
        ("iso-7870-2",),
    ),
    Method(
        "median-range",
        "Within-subgroup sigma from the median range",
        "sigma = median of R_i over the median of W for its size.",
        ("xbar-r", "xbar-s"),
        ("iso-7870-2",),
    ),
    Method(
        "moving-range",
        "Sigma from successive differences",
        "sigma = mean moving range of span w over d2(w), or median moving range over the median of W.",
        ("individuals", "assessMeasurements"),
        ("iso-7870-2", "cryer-ryan-1990"),
    ),
    Method(
        "mean-and-spread-charts",
        "Charts of means with ranges or standard deviations",
        "mean: centre +- k sigma/sqrt(n_i); range: d2 sigma +- k d3 sigma; deviation: c4 sigma +- k sigma "
        "sqrt(1-c4^2); or equal-tail limits of the exact distributions.",
        ("xbar-r", "xbar-s"),
        ("shewhart-1931", "iso-7870-2", "astm-e2587"),
    ),
    Method(
        "single-values-chart",
        "Charts of single values and moving ranges",
        "values: mean +- k sigma; moving range: d2(w) sigma +- k d3(w) sigma.",
        ("individuals",),
        ("iso-7870-2", "astm-e2587"),
    ),
    Method(
        "count-charts",
        "Charts of counts",
        "p-bar = sum x_i/sum n_i, p-bar +- k sqrt(p-bar(1-p-bar)/n_i); u-bar = sum c_i/sum a_i, "
        "u-bar +- k sqrt(u-bar/a_i); or exact equal-tail limits on whole counts.",
        ("p", "np", "c", "u"),
        ("shewhart-1931", "iso-7870-2", "astm-e2587"),
    ),
    Method(
        "dispersed-count-charts",
        "Charts of counts that vary more, or less, than chance alone",
        "z_i = (p_i - p-bar)/sqrt(p-bar(1-p-bar)/n_i), or with sqrt(u-bar/a_i); sigma_z = mean moving range of z "
        "over d2(2); p-bar +- k sigma_z sqrt(p-bar(1-p-bar)/n_i).",
        ("p-prime", "u-prime"),
        ("laney-2002",),
    ),
    Method(
        "opportunities-between-events",
        "Chart of opportunities between events",
        "geometric: p = 1/(1 + y-bar), or unbiased (n-1)/(n-1 + sum y); y-bar +- k sqrt(y-bar(y-bar+1)), or exact "
        "equal-tail limits on whole counts from P(Y > y) = (1-p)^(y+1).",
        ("g",),
        ("kaminsky-1992", "girshick-mosteller-savage-1946"),
    ),
    Method(
        "time-between-events",
        "Chart of the time between events",
        "exponential or Weibull by maximum likelihood; equal-tail limits scale (-ln(1-a/2))^(1/shape) and "
        "scale (-ln(a/2))^(1/shape); rules on normal scores.",
        ("t",),
        ("xie-goh-ranjan-2002", "nelson-1994", "cohen-1965"),
    ),
    Method(
        "averages-with-memory",
        "EWMA and moving averages",
        "z_i = lambda x_i + (1 - lambda) z_{i-1}, limits +- L sqrt(v_i) sigma with v_i = (1 - lambda)^2 v_{i-1} + "
        "lambda^2/n_i; moving average of w points weighted by size, +- k sigma/sqrt(sum of sizes).",
        ("ewma", "moving-average"),
        ("roberts-1959", "iso-7870-5", "iso-7870-6"),
    ),
    Method(
        "cumulative-sums",
        "CUSUM of level and of spread",
        "C+ = max(0, C+ + z - k), C- = max(0, C- - z - k), a signal above h; the shift began after the sum was last 0, "
        "and its mean is target +- (k + C/N) sigma. Spread: the same sums of the standardised fourth root of the "
        "variance.",
        ("cusum",),
        ("page-1954", "lucas-crosier-1982", "hawkins-1981", "hawkins-wixley-1986", "iso-7870-4"),
    ),
    Method(
        "one-distance-of-several-variables",
        "Hotelling's T-squared and the multivariate EWMA",
        "T2 = (x - mean)' S^-1 (x - mean); phase one by the beta law, phase two by F; MEWMA: T2 of the smoothed vector "
        "by its own covariance, its limit from its run length; a signal is decomposed by variable.",
        ("t-squared", "mewma"),
        (
            "hotelling-1947",
            "tracy-young-mason-1992",
            "mason-tracy-young-1995",
            "holmes-mergen-1993",
            "lowry-woodall-champ-rigdon-1992",
            "rigdon-1995",
            "runger-prabhu-1996",
        ),
    ),
    Method(
        "between-and-within",
        "Means as single values, components between and within",
        "mean of means +- k sigma_m, sigma_m = mean moving range of the means over d2(w); between = sigma_m^2 - "
        "sigma_w^2/n (n the harmonic mean of sizes), set to 0 where below, and shown as it comes.",
        ("between-within",),
        ("iso-7870-2", "wheeler-chambers-1992", "patnaik-1950"),
    ),
    Method(
        "short-runs",
        "Many parts on one chart",
        "deviation x - T of each part, or standardised (x - T)/sigma of the part; limits as for single values or "
        "subgroups of what is plotted.",
        ("short-run",),
        ("iso-7870-8", "iso-7870-2"),
    ),
    Method(
        "drifting-level",
        "A fitted line with parallel limits",
        "weighted least squares of the level on position; line +- k sigma/sqrt(n_i); sigma^2 = sum n_i e_i^2/(m-2), or "
        "from moving ranges, or within subgroups; where the line meets a limit, with Fieller's interval.",
        ("trend",),
        ("mandel-1969", "montgomery-2013", "fieller-1954"),
    ),
    Method(
        "autoregressive-residuals",
        "Residuals of an autoregressive model",
        "conditional least squares on whole windows of p + 1 values; order by AICc = w ln(SSE/w) + 2k + "
        "2k(k+1)/(w-k-1), k = p + 2; residuals 0 +- k sigma; roots within the unit circle.",
        ("residual",),
        ("iso-7870-9", "alwan-roberts-1988", "box-jenkins-1976", "hurvich-tsai-1989"),
    ),
    Method(
        "acceptance-limits",
        "Acceptance control limits",
        "n = ((z_alpha + z_beta)/(z_p1 - z_p2))^2 rounded up; APL = U - z_p1 sigma, RPL = U - z_p2 sigma, "
        "limit = APL + z_alpha sigma/sqrt(n), mirrored at a lower limit.",
        ("acceptance",),
        ("iso-7870-3", "freund-1957"),
    ),
    Method(
        "run-rules",
        "Run rules",
        "zone, mixture, stratification, trend and alternation; see GET /v1/rules for their exact meaning.",
        ("getRules", "xbar-r", "xbar-s", "individuals", "p", "np", "c", "u"),
        ("western-electric-1956", "nelson-1984"),
    ),
    Method(
        "run-length",
        "Run lengths of rules with known parameters",
        "absorbing Markov chain of the rules' automaton; with rules on order, times the last value; moving averages "
        "and smoothed vectors by their survivors on a grid. Steady state: from the conditional law in control.",
        ("computeRunLength", "designSubgroups"),
        ("brook-evans-1972", "champ-woodall-1987", "rigdon-1995", "runger-prabhu-1996"),
    ),
    Method(
        "baseline-diagnostics",
        "Diagnostics of a baseline",
        "Ljung-Box portmanteau of autocorrelation; Anderson-Darling and Shapiro-Wilk normality; Bartlett's "
        "test of spread; chi-square index of dispersion of counts.",
        ("xbar-r", "xbar-s", "individuals", "p", "np", "c", "u", "assessMeasurements"),
        (
            "ljung-box-1978",
            "dagostino-stephens-1986",
            "royston-1995",
            "bartlett-1937",
            "fisher-1925",
            "cochran-1954",
            "laney-2002",
        ),
    ),
    Method(
        "individuals-from-distribution",
        "Single values that are not normal",
        "limits F^-1(Phi(+-k)) and rules on z = Phi^-1(F(x)) of a distribution fitted by maximum likelihood; moving "
        "ranges by the distribution of the range of its values.",
        ("individuals",),
        ("iso-7870-2", "dagostino-stephens-1986", "hurvich-tsai-1989"),
    ),
    Method(
        "estimated-limits",
        "What limits from estimates deliver",
        "mean, deviation and tenth percentile of the average run length over baselines; the multiple that holds one "
        "with a stated confidence.",
        ("xbar-r", "xbar-s", "individuals"),
        ("jensen-2006", "gandy-kvaloy-2013"),
    ),
    Method(
        "change-point",
        "Steps of level and spread within a baseline",
        "largest likelihood ratio over all splits; p-value of the whole search by the normal scores' crossing rate.",
        ("xbar-r", "xbar-s", "individuals"),
        ("sullivan-woodall-1996", "worsley-1979", "james-1987", "siegmund-1985"),
    ),
    Method(
        "joint-limits",
        "Limits that judge all points of a baseline at once",
        "E[(2 Phi(K' W) - 1)^m] = sqrt(1 - alpha) over the distribution of W = estimated over true sigma.",
        ("xbar-r", "xbar-s", "individuals"),
        ("champ-jones-2004",),
    ),
    Method(
        "chart-recommendation",
        "Choice of a chart",
        "kind of data, then what the process does by nature, then the shift that matters, then the sample's size; a "
        "sample is looked at with the diagnostics of a baseline.",
        ("recommendChart",),
        ("iso-7870-1",),
    ),
    Method(
        "capability-of-measurements",
        "Capability and performance of normal characteristics",
        "Cp = (U-L)/(6 sigma), Cpk = min(U-mean, mean-L)/(3 sigma) with the within-subgroup sigma; Pp, Ppk with "
        "the overall one; Cpm, Cpmk with the root mean square deviation from the target.",
        ("assessMeasurements",),
        (
            "kane-1986",
            "chou-owen-borrego-1990",
            "bissell-1990",
            "boyles-1991",
            "chen-hsu-1995",
            "weerahandi-1993",
            "clopper-pearson-1934",
            "iso-22514-1",
            "iso-22514-2",
            "iso-22514-3",
        ),
    ),
    Method(
        "memory-run-length",
        "Run lengths of EWMA and CUSUM charts",
        "integral equations of the run length by Gauss-Legendre Nystrom, two sides of a CUSUM combined exactly.",
        ("computeRunLength", "designEwma", "designCusum"),
        (
            "crowder-1987",
            "vance-1986",
            "lucas-crosier-1982",
            "van-dobben-de-bruyn-1968",
            "siegmund-1985",
            "asmussen-2003",
        ),
    ),
    Method(
        "ewma-design",
        "Optimal EWMA charts",
        "the lambda and L of least out-of-control ARL at a stated in-control ARL.",
        ("designEwma",),
        ("crowder-1989", "lucas-saccucci-1990"),
    ),
    Method(
        "cusum-design",
        "Optimal CUSUM charts",
        "the k and h of least out-of-control ARL at a stated in-control ARL.",
        ("designCusum",),
        ("page-1954", "moustakides-1986"),
    ),
    Method(
        "mean-chart-design",
        "Design of a mean chart",
        "beta = Phi(k - shift sqrt(n)) - Phi(-k - shift sqrt(n)); ARL = 1/(1-beta); ATS = interval ARL.",
        ("designSubgroups",),
        ("montgomery-2013", "reynolds-1988"),
    ),
    Method(
        "count-chart-design",
        "Design of charts of counts",
        "limits on whole counts decided in exact arithmetic; P(signal) = P(X < fewest) + P(X > most) of the binomial "
        "or Poisson law; every size tried; the usual formula n = ((k sqrt(v0) + z sqrt(v1))/shift)^2 beside it.",
        ("designAttributes",),
        ("montgomery-2013", "duncan-1986"),
    ),
    Method(
        "baseline-design",
        "Trust in limits from a baseline",
        "conditional in-control ARL 1/p, p = Phi(-k W + Z/sqrt(m)) + Phi(-k W - Z/sqrt(m)), over the errors Z of the "
        "centre and W of sigma; the multiple k at which P(ARL >= target) is the confidence asked.",
        ("designBaseline",),
        ("jensen-2006", "gandy-kvaloy-2013", "goedhart-2017", "jardim-2020", "patnaik-1950"),
    ),
    Method(
        "economic-design",
        "Economic design of a mean chart",
        "least expected cost an hour = cost of a cycle / hours of a cycle over size, interval and limit multiple, "
        "subject to statistical requirements.",
        ("designEconomic",),
        ("lorenzen-vance-1986", "duncan-1956", "saniga-1989"),
    ),
    Method(
        "chart-comparison",
        "Charts side by side",
        "hours from a shift at a random moment to its signal, interval (steady-state ARL - 1/2), at equal hours "
        "between false alarms and equal pieces an hour.",
        ("compareDesigns",),
        ("reynolds-1988", "champ-woodall-1987", "lucas-saccucci-1990"),
    ),
    Method(
        "crossed-study",
        "Crossed gauge study",
        "MS of a balanced two-way random model; repeatability = MS_E, part x appraiser = (MS_PA - MS_E)/r, "
        "appraiser = (MS_A - MS_PA)/(p r), part = (MS_P - MS_PA)/(o r); negative components count as zero; modified "
        "large-sample intervals; the interaction pooled where its p-value exceeds alpha.",
        ("analyseCrossedStudy",),
        (
            "aiag-msa-2010",
            "burdick-borror-montgomery-2005",
            "burdick-borror-montgomery-2003",
            "ting-1990",
            "graybill-wang-1980",
            "leiva-graybill-1986",
        ),
    ),
    Method(
        "nested-study",
        "Nested gauge study",
        "MS of a balanced two-stage nested random model; repeatability = MS_E, part = (MS_P(A) - MS_E)/r, "
        "appraiser = (MS_A - MS_P(A))/(b r); negative components count as zero.",
        ("analyseNestedStudy",),
        (
            "searle-casella-mcculloch-1992",
            "burdick-borror-montgomery-2005",
            "ting-1990",
            "graybill-wang-1980",
        ),
    ),
    Method(
        "agreement-study",
        "Agreement of appraisers who sort",
        "kappa = (observed - expected)/(1 - expected): Cohen's for pairs, by items as the sampling unit, and "
        "Fleiss' over all ratings; shares with exact binomial intervals.",
        ("analyseAgreementStudy",),
        (
            "aiag-msa-2010",
            "cohen-1960",
            "fleiss-1971",
            "fleiss-cohen-everitt-1969",
            "fleiss-levin-paik-2003",
            "clopper-pearson-1934",
        ),
    ),
    Method(
        "bias-study",
        "Bias and linearity of a gauge",
        "bias = mean - reference with its t interval; least-squares line of the single biases on the reference, F test "
        "of its lack of fit.",
        ("analyseBiasStudy",),
        ("aiag-msa-2010", "iso-22514-7-2021"),
    ),
    Method(
        "release-check",
        "Results of a batch against specification, guard band and own limits",
        "value = result, or exact mean of replicates; rounded once to the decimals stated, halves up in magnitude or "
        "to even; out of specification if value < L or value > U; in the guard band if the unrounded value < L + w or "
        "> U - w, with w stated, r u, or from Phi(w/u) + Phi((U-L-w)/u) - 1 = 1 - risk.",
        ("checkRelease",),
        ("astm-e29", "iso-80000-1", "jcgm-106", "iso-14253-1"),
    ),
    Method(
        "capability-by-quantiles",
        "Capability of characteristics that are not normal",
        "Pp = (U-L)/(X99.865-X0.135), Ppk = min((U-X50)/(X99.865-X50), (X50-L)/(X50-X0.135)) of a distribution fitted "
        "by maximum likelihood; results below a limit enter as log F(limit); Anderson-Darling p-values for estimated "
        "parameters; AICc.",
        ("assessMeasurements",),
        (
            "iso-22514-2",
            "clements-1989",
            "johnson-kotz-balakrishnan-1994",
            "cohen-1959",
            "cohen-whitten-1980",
            "lawless-2003",
            "leone-nelson-nottingham-1961",
            "box-cox-1964",
            "johnson-1949",
            "anderson-darling-1952",
            "durbin-1973",
            "stephens-1976",
            "davies-1973",
            "dagostino-stephens-1986",
            "hurvich-tsai-1989",
            "burnham-anderson-2002",
            "david-nagaraja-2003",
        ),
    ),
    Method(
        "capability-of-attributes",
        "Capability of counted characteristics",
        "rate = events/inspected with its exact interval; equivalent index = -Phi^-1(p)/3, p the share of "
        "nonconforming units, 1 - exp(-rate) for nonconformities.",
        ("assessAttributes",),
        ("clopper-pearson-1934", "garwood-1936", "iso-22514-1"),
    ),
    Method(
        "capability-of-several",
        "Several characteristics of one product",
        "1 - P(all within their limits) of a multivariate normal, by randomly shifted lattices; its interval by a "
        "generalised pivot of mean and covariance.",
        ("assessSeveral",),
        ("iso-22514-6", "genz-1992", "weerahandi-1993"),
    ),
    Method(
        "tolerance-interval",
        "Statistical tolerance intervals",
        "mean +- k s with the exact k of the integral equation, or of non-central t for one side; Howe's "
        "approximation; or order statistics.",
        ("computeToleranceInterval",),
        (
            "wald-wolfowitz-1946",
            "johnson-welch-1940",
            "howe-1969",
            "iso-16269-6",
            "wilks-1941",
            "faulkenberry-weeks-1968",
        ),
    ),
    Method(
        "conformance",
        "Conformance under measurement uncertainty",
        "P(conforming) = Phi((U-m)/v) - Phi((L-m)/v), m and v mean and standard deviation of the true value given the "
        "result; acceptance limits at a stated risk; consumer's and producer's risk by quadrature over the process.",
        ("assessConformance",),
        ("jcgm-106", "iso-14253-1"),
    ),
    Method(
        "verification",
        "Published cases",
        "a figure agrees where |obtained - published| <= half a unit of the last digit of the published one.",
        ("getVerification",),
        (),
    ),
)
"""Every method, in the order in which they are listed."""
