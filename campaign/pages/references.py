"""Works that the text for a paper cites, as BibTeX knows them; the Method page lists all sources in words."""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable
from dataclasses import dataclass

_ARTICLE, _BOOK, _REPORT = "article", "book", "techreport"


@dataclass(frozen=True)
class Reference:
    """One work.

    Attributes
    ----------
    label
        How a text cites it: ``Fieller 1954``.
    kind
        Of BibTeX.
    fields
        Of BibTeX, with TeX left out: author, title, year, journal, volume, pages, publisher, ….
    """

    label: str
    kind: str
    fields: dict[str, str]

    @property
    def key(self) -> str:
        """Key in a bibliography: ``fieller1954``."""
        plain = unicodedata.normalize("NFKD", self.label.lower())
        return "".join(c for c in plain if c.isascii() and c.isalnum())

    @property
    def bibtex(self) -> str:
        """The work as an entry of BibTeX."""
        lines = [f"  {name} = {{{value}}}," for name, value in self.fields.items()]
        return "\n".join([f"@{self.kind}{{{self.key},", *lines, "}"])

    @property
    def sentence(self) -> str:
        """The work in one line, as a list of references gives it."""
        said = self.fields
        place = said.get("journal") or said.get("publisher") or said.get("institution", "")
        number = " ".join(filter(None, (said.get("volume"), said.get("number"))))
        where = ", ".join(
            filter(None, (f"{place} {number}".strip(), said.get("pages", "").replace("--", "–")))
        )
        who = said["author"].replace(" and ", ", ").strip("{}")
        return f"{who} ({said['year']}). {said['title']}. {where}."


def cited_in(text: str) -> tuple[Reference, ...]:
    """Return the works that *text* cites, in the order of their labels."""
    return tuple(sorted((r for r in REFERENCES if r.label in text), key=lambda r: r.key))


def bibliography(references: Iterable[Reference]) -> str:
    """Return *references* as one file of BibTeX."""
    return "\n\n".join(reference.bibtex for reference in references) + "\n"


def _work(label: str, kind: str, author: str, title: str, year: str, **more: str) -> Reference:
    return Reference(label, kind, {"author": author, "title": title, "year": year, **more})


_JASA = "Journal of the American Statistical Association"

REFERENCES: tuple[Reference, ...] = (
    _work(
        "Baarda 1968",
        _REPORT,
        "Baarda, W.",
        "A testing procedure for use in geodetic networks",
        "1968",
        institution="Netherlands Geodetic Commission, Publications on Geodesy",
        number="New Series 2(5)",
    ),
    _work(
        "Cochran 1977",
        _BOOK,
        "Cochran, W. G.",
        "Sampling Techniques",
        "1977",
        publisher="Wiley",
    ),
    _work(
        "Davison and Hinkley 1997",
        _BOOK,
        "Davison, A. C. and Hinkley, D. V.",
        "Bootstrap Methods and their Application",
        "1997",
        publisher="Cambridge University Press",
    ),
    _work(
        "Donner and Zou 2012",
        _ARTICLE,
        "Donner, A. and Zou, G. Y.",
        "Closed-form confidence intervals for functions of the normal mean and standard deviation",
        "2012",
        journal="Statistical Methods in Medical Research",
        volume="21",
        pages="347--359",
    ),
    _work(
        "Fieller 1954",
        _ARTICLE,
        "Fieller, E. C.",
        "Some problems in interval estimation",
        "1954",
        journal="Journal of the Royal Statistical Society B",
        volume="16",
        pages="175--185",
    ),
    _work(
        "Geyer 1992",
        _ARTICLE,
        "Geyer, C. J.",
        "Practical Markov chain Monte Carlo",
        "1992",
        journal="Statistical Science",
        volume="7",
        pages="473--483",
    ),
    _work(
        "Harville 1977",
        _ARTICLE,
        "Harville, D. A.",
        "Maximum likelihood approaches to variance component estimation",
        "1977",
        journal=_JASA,
        volume="72",
        pages="320--338",
    ),
    _work(
        "Holm 1979",
        _ARTICLE,
        "Holm, S.",
        "A simple sequentially rejective multiple test procedure",
        "1979",
        journal="Scandinavian Journal of Statistics",
        volume="6",
        pages="65--70",
    ),
    _work(
        "Hurvich and Tsai 1989",
        _ARTICLE,
        "Hurvich, C. M. and Tsai, C.-L.",
        "Regression and time series model selection in small samples",
        "1989",
        journal="Biometrika",
        volume="76",
        pages="297--307",
    ),
    _work(
        "JCGM 100:2008",
        _REPORT,
        "{Joint Committee for Guides in Metrology}",
        "Guide to the expression of uncertainty in measurement",
        "2008",
        institution="JCGM",
        number="100:2008",
    ),
    _work(
        "JCGM 101:2008",
        _REPORT,
        "{Joint Committee for Guides in Metrology}",
        "Propagation of distributions using a Monte Carlo method",
        "2008",
        institution="JCGM",
        number="101:2008",
    ),
    _work(
        "Patterson and Thompson 1971",
        _ARTICLE,
        "Patterson, H. D. and Thompson, R.",
        "Recovery of inter-block information when block sizes are unequal",
        "1971",
        journal="Biometrika",
        volume="58",
        pages="545--554",
    ),
    _work(
        "Pope 1976",
        _REPORT,
        "Pope, A. J.",
        "The statistics of residuals and the detection of outliers",
        "1976",
        institution="NOAA Technical Report",
        number="NOS 65 NGS 1",
    ),
    _work(
        "Riley 2008",
        _REPORT,
        "Riley, W. J.",
        "Handbook of Frequency Stability Analysis",
        "2008",
        institution="NIST Special Publication",
        number="1065",
    ),
    _work(
        "Sasabuchi 1980",
        _ARTICLE,
        "Sasabuchi, S.",
        "A test of a multivariate normal mean with composite hypotheses determined by linear inequalities",
        "1980",
        journal="Biometrika",
        volume="67",
        pages="429--439",
    ),
    _work(
        "Satterthwaite 1946",
        _ARTICLE,
        "Satterthwaite, F. E.",
        "An approximate distribution of estimates of variance components",
        "1946",
        journal="Biometrics Bulletin",
        volume="2",
        pages="110--114",
    ),
    _work(
        "Schönemann 1966",
        _ARTICLE,
        "Schönemann, P. H.",
        "A generalized solution of the orthogonal Procrustes problem",
        "1966",
        journal="Psychometrika",
        volume="31",
        pages="1--10",
    ),
    _work(
        "Schuirmann 1987",
        _ARTICLE,
        "Schuirmann, D. J.",
        "A comparison of the two one-sided tests procedure and the power approach for assessing the"
        " equivalence of average bioavailability",
        "1987",
        journal="Journal of Pharmacokinetics and Biopharmaceutics",
        volume="15",
        pages="657--680",
    ),
    _work(
        "Seely and El-Bassiouny 1983",
        _ARTICLE,
        "Seely, J. F. and El-Bassiouny, Y.",
        "Applying Wald’s variance component test",
        "1983",
        journal="Annals of Statistics",
        volume="11",
        pages="197--201",
    ),
    _work(
        "Self and Liang 1987",
        _ARTICLE,
        "Self, S. G. and Liang, K.-Y.",
        "Asymptotic properties of maximum likelihood estimators and likelihood ratio tests under nonstandard"
        " conditions",
        "1987",
        journal=_JASA,
        volume="82",
        pages="605--610",
    ),
    _work(
        "Šidák 1967",
        _ARTICLE,
        "Šidák, Z.",
        "Rectangular confidence regions for the means of multivariate normal distributions",
        "1967",
        journal=_JASA,
        volume="62",
        pages="626--633",
    ),
    _work(
        "Strang and Borre 1997",
        _BOOK,
        "Strang, G. and Borre, K.",
        "Linear Algebra, Geodesy, and GPS",
        "1997",
        publisher="Wellesley-Cambridge Press",
    ),
    _work(
        "Swamy 1970",
        _ARTICLE,
        "Swamy, P. A. V. B.",
        "Efficient inference in a random coefficient regression model",
        "1970",
        journal="Econometrica",
        volume="38",
        pages="311--323",
    ),
    _work(
        "Welch 1947",
        _ARTICLE,
        "Welch, B. L.",
        "The generalization of ‘Student’s’ problem when several different population variances are involved",
        "1947",
        journal="Biometrika",
        volume="34",
        pages="28--35",
    ),
)
"""The works, in the order of their labels."""
