"""The one bibliography: docstrings and answers cite its keys, ``/v1/methods`` serves it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Annotated


@dataclass(frozen=True, slots=True)
class Reference:
    """A published source."""

    key: Annotated[str, "The name by which docstrings and answers cite it."]
    authors: Annotated[str, "Who wrote or issued it."]
    year: Annotated[int, "Year of publication."]
    title: Annotated[str, "Its title."]
    published: Annotated[str, "Where it was published."]


_LISTED = (
    Reference(
        "shewhart-1931",
        "Shewhart, W. A.",
        1931,
        "Economic control of quality of manufactured product",
        "Van Nostrand, New York",
    ),
    Reference(
        "western-electric-1956",
        "Western Electric Company",
        1956,
        "Statistical quality control handbook",
        "Western Electric Company, Indianapolis",
    ),
    Reference(
        "nelson-1984",
        "Nelson, L. S.",
        1984,
        "The Shewhart control chart: tests for special causes",
        "Journal of Quality Technology 16(4), 237-239",
    ),
    Reference(
        "iso-7870-2",
        "ISO",
        2023,
        "Control charts - Part 2: Shewhart control charts",
        "ISO 7870-2:2023",
    ),
    Reference(
        "astm-e2587",
        "ASTM International",
        2016,
        "Standard practice for use of control charts in statistical process control",
        "ASTM E2587",
    ),
    Reference(
        "abramowitz-stegun-1964",
        "Abramowitz, M.; Stegun, I. A. (eds)",
        1964,
        "Handbook of mathematical functions",
        "National Bureau of Standards, Applied Mathematics Series 55",
    ),
    Reference(
        "bartlett-1937",
        "Bartlett, M. S.",
        1937,
        "Properties of sufficiency and statistical tests",
        "Proceedings of the Royal Society A 160, 268-282",
    ),
    Reference(
        "burr-1969",
        "Burr, I. W.",
        1969,
        "Control charts for measurements with varying sample sizes",
        "Journal of Quality Technology 1(3), 163-167",
    ),
    Reference(
        "chan-1983",
        "Chan, T. F.; Golub, G. H.; LeVeque, R. J.",
        1983,
        "Algorithms for computing the sample variance: analysis and recommendations",
        "The American Statistician 37, 242-247",
    ),
    Reference(
        "cochran-1954",
        "Cochran, W. G.",
        1954,
        "Some methods for strengthening the common chi-square tests",
        "Biometrics 10, 417-451",
    ),
    Reference(
        "cryer-ryan-1990",
        "Cryer, J. D.; Ryan, T. P.",
        1990,
        "The estimation of sigma for an X chart: MR/d2 or S/c4?",
        "Journal of Quality Technology 22, 187-192",
    ),
    Reference(
        "dagostino-stephens-1986",
        "D'Agostino, R. B.; Stephens, M. A. (eds)",
        1986,
        "Goodness-of-fit techniques",
        "Marcel Dekker, New York",
    ),
    Reference(
        "fisher-1925",
        "Fisher, R. A.",
        1925,
        "Statistical methods for research workers",
        "Oliver & Boyd, Edinburgh",
    ),
    Reference(
        "hartley-1942",
        "Hartley, H. O.",
        1942,
        "The range in random samples",
        "Biometrika 32, 334-348",
    ),
    Reference(
        "laney-2002",
        "Laney, D. B.",
        2002,
        "Improved control charts for attributes",
        "Quality Engineering 14(4), 531-537",
    ),
    Reference(
        "ljung-box-1978",
        "Ljung, G. M.; Box, G. E. P.",
        1978,
        "On a measure of lack of fit in time series models",
        "Biometrika 65(2), 297-303",
    ),
    Reference(
        "patnaik-1950",
        "Patnaik, P. B.",
        1950,
        "The use of mean range as an estimator of variance in statistical tests",
        "Biometrika 37, 78-87",
    ),
    Reference(
        "royston-1995",
        "Royston, P.",
        1995,
        "Remark AS R94: a remark on algorithm AS 181: the W-test for normality",
        "Applied Statistics 44(4), 547-551",
    ),
    Reference(
        "tippett-1925",
        "Tippett, L. H. C.",
        1925,
        "On the extreme individuals and the range of samples taken from a normal population",
        "Biometrika 17, 364-387",
    ),
    Reference(
        "brook-evans-1972",
        "Brook, D.; Evans, D. A.",
        1972,
        "An approach to the probability distribution of CUSUM run length",
        "Biometrika 59(3), 539-549",
    ),
    Reference(
        "champ-woodall-1987",
        "Champ, C. W.; Woodall, W. H.",
        1987,
        "Exact results for Shewhart control charts with supplementary runs rules",
        "Technometrics 29(4), 393-399",
    ),
    Reference(
        "kane-1986",
        "Kane, V. E.",
        1986,
        "Process capability indices",
        "Journal of Quality Technology 18(1), 41-52",
    ),
    Reference(
        "chou-owen-borrego-1990",
        "Chou, Y.-M.; Owen, D. B.; Borrego, S. A.",
        1990,
        "Lower confidence limits on process capability indices",
        "Journal of Quality Technology 22(3), 223-229",
    ),
    Reference(
        "bissell-1990",
        "Bissell, A. F.",
        1990,
        "How reliable is your capability index?",
        "Applied Statistics 39(3), 331-340",
    ),
    Reference(
        "boyles-1991",
        "Boyles, R. A.",
        1991,
        "The Taguchi capability index",
        "Journal of Quality Technology 23(1), 17-26",
    ),
    Reference(
        "chen-hsu-1995",
        "Chen, S.-M.; Hsu, N.-F.",
        1995,
        "The asymptotic distribution of the process capability index Cpmk",
        "Communications in Statistics - Theory and Methods 24(5), 1279-1291",
    ),
    Reference(
        "weerahandi-1993",
        "Weerahandi, S.",
        1993,
        "Generalized confidence intervals",
        "Journal of the American Statistical Association 88(423), 899-905",
    ),
    Reference(
        "clopper-pearson-1934",
        "Clopper, C. J.; Pearson, E. S.",
        1934,
        "The use of confidence or fiducial limits illustrated in the case of the binomial",
        "Biometrika 26(4), 404-413",
    ),
    Reference(
        "iso-22514-1",
        "ISO",
        2014,
        "Capability and performance - Part 1: General principles and concepts",
        "ISO 22514-1:2014",
    ),
    Reference(
        "iso-22514-2",
        "ISO",
        2017,
        "Capability and performance - Part 2: Process capability and performance of time-dependent process models",
        "ISO 22514-2:2017",
    ),
    Reference(
        "iso-22514-3",
        "ISO",
        2020,
        "Capability and performance - Part 3: Machine performance studies for measured data on discrete parts",
        "ISO 22514-3:2020",
    ),
    Reference(
        "montgomery-2013",
        "Montgomery, D. C.",
        2013,
        "Introduction to statistical quality control, 7th edition",
        "Wiley, Hoboken",
    ),
    Reference(
        "reynolds-1988",
        "Reynolds, M. R.; Amin, R. W.; Arnold, J. C.; Nachlas, J. A.",
        1988,
        "X-bar charts with variable sampling intervals",
        "Technometrics 30(2), 181-192",
    ),
    Reference(
        "aiag-msa-2010",
        "AIAG",
        2010,
        "Measurement systems analysis, 4th edition",
        "Automotive Industry Action Group, Southfield",
    ),
    Reference(
        "burdick-borror-montgomery-2003",
        "Burdick, R. K.; Borror, C. M.; Montgomery, D. C.",
        2003,
        "A review of methods for measurement systems capability analysis",
        "Journal of Quality Technology 35(4), 342-354",
    ),
    Reference(
        "burdick-borror-montgomery-2005",
        "Burdick, R. K.; Borror, C. M.; Montgomery, D. C.",
        2005,
        "Design and analysis of gauge R&R studies",
        "ASA-SIAM, Philadelphia",
    ),
    Reference(
        "cohen-1960",
        "Cohen, J.",
        1960,
        "A coefficient of agreement for nominal scales",
        "Educational and Psychological Measurement 20, 37-46",
    ),
    Reference(
        "fleiss-1971",
        "Fleiss, J. L.",
        1971,
        "Measuring nominal scale agreement among many raters",
        "Psychological Bulletin 76, 378-382",
    ),
    Reference(
        "fleiss-cohen-everitt-1969",
        "Fleiss, J. L.; Cohen, J.; Everitt, B. S.",
        1969,
        "Large sample standard errors of kappa and weighted kappa",
        "Psychological Bulletin 72, 323-327",
    ),
    Reference(
        "fleiss-levin-paik-2003",
        "Fleiss, J. L.; Levin, B.; Paik, M. C.",
        2003,
        "Statistical methods for rates and proportions, 3rd edition, chapter 18",
        "Wiley, Hoboken",
    ),
    Reference(
        "graybill-wang-1980",
        "Graybill, F. A.; Wang, C.-M.",
        1980,
        "Confidence intervals on nonnegative linear combinations of variances",
        "Journal of the American Statistical Association 75, 869-873",
    ),
    Reference(
        "iso-22514-7-2021",
        "ISO",
        2021,
        "Capability and performance - Part 7: Capability of measurement processes",
        "ISO 22514-7:2021",
    ),
    Reference(
        "leiva-graybill-1986",
        "Leiva, R. A.; Graybill, F. A.",
        1986,
        "Confidence intervals for variance components in the balanced two-way model with interaction",
        "Communications in Statistics - Simulation and Computation 15, 301-322",
    ),
    Reference(
        "searle-casella-mcculloch-1992",
        "Searle, S. R.; Casella, G.; McCulloch, C. E.",
        1992,
        "Variance components",
        "Wiley, New York",
    ),
    Reference(
        "ting-1990",
        "Ting, N.; Burdick, R. K.; Graybill, F. A.; Jeyaratnam, S.; Lu, T.-F. C.",
        1990,
        "Confidence intervals on linear combinations of variance components that are unrestricted in sign",
        "Journal of Statistical Computation and Simulation 35, 135-143",
    ),
    Reference(
        "wheeler-chambers-1992",
        "Wheeler, D. J.; Chambers, D. S.",
        1992,
        "Understanding statistical process control, 2nd edition",
        "SPC Press, Knoxville",
    ),
    Reference(
        "kaminsky-1992",
        "Kaminsky, F. C.; Benneyan, J. C.; Davis, R. D.; Burke, R. J.",
        1992,
        "Statistical control charts based on a geometric distribution",
        "Journal of Quality Technology 24(2), 63-69",
    ),
    Reference(
        "nelson-1994",
        "Nelson, L. S.",
        1994,
        "A control chart for parts-per-million nonconforming items",
        "Journal of Quality Technology 26(3), 239-240",
    ),
    Reference(
        "xie-goh-ranjan-2002",
        "Xie, M.; Goh, T. N.; Ranjan, P.",
        2002,
        "Some effective control chart procedures for reliability monitoring",
        "Reliability Engineering and System Safety 77(2), 143-150",
    ),
    Reference(
        "girshick-mosteller-savage-1946",
        "Girshick, M. A.; Mosteller, F.; Savage, L. J.",
        1946,
        "Unbiased estimates for certain binomial sampling problems with applications",
        "Annals of Mathematical Statistics 17(1), 13-23",
    ),
    Reference(
        "cohen-1965",
        "Cohen, A. C.",
        1965,
        "Maximum likelihood estimation in the Weibull distribution based on complete and on censored samples",
        "Technometrics 7(4), 579-588",
    ),
)

REFERENCES: Mapping[str, Reference] = MappingProxyType(
    {reference.key: reference for reference in sorted(_LISTED, key=lambda reference: reference.key)}
)
"""Every source by its key."""
