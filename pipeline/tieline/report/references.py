"""The works a methods paragraph can cite, as text and as BibTeX.

Titles and the place of each entry are as recalled unless marked; a reader checks them before printing, as with any
reference list.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Reference:
    """`short` is how the text cites it; `place` is journal, volume and first page, or the publisher."""

    key: str
    short: str
    author: str
    year: int
    title: str
    place: str
    volume: str = ""
    pages: str = ""

    def text(self) -> str:
        where = f"{self.place} {self.volume}:{self.pages}" if self.volume else self.place
        return f"{self.author.strip('{}')} ({self.year}) {self.title}. {where}."

    def bibtex(self) -> str:
        """One entry; every field in braces, so that capitals stay."""
        kind = "article" if self.volume else "techreport"
        fields = {"author": self.author.replace("; ", " and "), "year": str(self.year)}
        fields |= {"title": f"{{{self.title}}}", "journal" if self.volume else "institution": self.place}
        fields |= {"volume": self.volume, "pages": self.pages} if self.volume else {}
        body = ",\n".join(f"  {name} = {{{_latin(value)}}}" for name, value in fields.items())
        return f"@{kind}{{{self.key},\n{body}\n}}\n"


def _latin(text: str) -> str:
    return text.replace("&", r"\&").replace("\N{LATIN SMALL LETTER SHARP S}", r"{\ss}")


_ALL = (
    Reference(
        "beattie1993", "Beattie et al. 1993",
        "Beattie, P.; Drake, M.; Jones, J.; Leeman, W.; Longhi, J.; McKay, G.; Nielsen, R.; Palme, H.; Shaw, D.; "
        "Takahashi, E.; Watson, B.", 1993, "Terminology for trace-element partitioning",
        "Geochimica et Cosmochimica Acta", "57", "1605",
    ),
    Reference(
        "prohaska2022", "Prohaska et al. 2022", "Prohaska, T.; Irrgeher, J.; Benefield, J.; others", 2022,
        "Standard atomic weights of the elements 2021", "Pure and Applied Chemistry", "94", "573",
    ),
    Reference(
        "droop1987", "Droop 1987", "Droop, G. T. R.", 1987,
        "A general equation for estimating Fe3+ concentrations in ferromagnesian silicates and oxides from microprobe "
        "analyses, using stoichiometric criteria", "Mineralogical Magazine", "51", "431",
    ),
    Reference(
        "paule1982", "Paule and Mandel 1982", "Paule, R. C.; Mandel, J.", 1982,
        "Consensus values and weighting factors", "Journal of Research of the National Bureau of Standards", "87",
        "377",
    ),
    Reference(
        "wendt1991", "Wendt and Carl 1991", "Wendt, I.; Carl, C.", 1991,
        "The statistical distribution of the mean squared weighted deviation", "Chemical Geology", "86", "275",
    ),
    Reference(
        "fieller1954", "Fieller 1954", "Fieller, E. C.", 1954, "Some problems in interval estimation",
        "Journal of the Royal Statistical Society B", "16", "175",
    ),
    Reference(
        "jcgm101", "JCGM 101:2008", "{Joint Committee for Guides in Metrology}", 2008,
        "Supplement 1 to the Guide to the expression of uncertainty in measurement: propagation of distributions "
        "using a Monte Carlo method (JCGM 101)", "BIPM",
    ),
    Reference(
        "jcgm100", "JCGM 100:2008", "{Joint Committee for Guides in Metrology}", 2008,
        "Guide to the expression of uncertainty in measurement (JCGM 100)", "BIPM",
    ),
    Reference(
        "amc2001", "Analytical Methods Committee 2001", "{Analytical Methods Committee}", 2001,
        "Measurement of near zero concentration: recording and reporting results that fall close to or below the "
        "detection limit", "Analyst", "126", "256",
    ),
    Reference(
        "grubbs1969", "Grubbs 1969", "Grubbs, F. E.", 1969,
        "Procedures for detecting outlying observations in samples", "Technometrics", "11", "1",
    ),
    Reference(
        "rosner1983", "Rosner 1983", "Rosner, B.", 1983,
        "Percentage points for a generalized ESD many-outlier procedure", "Technometrics", "25", "165",
    ),
    Reference(
        "iglewicz1993", "Iglewicz and Hoaglin 1993", "Iglewicz, B.; Hoaglin, D. C.", 1993,
        "How to detect and handle outliers", "ASQC Quality Press",
    ),
    Reference(
        "shannon1976", "Shannon 1976", "Shannon, R. D.", 1976,
        "Revised effective ionic radii and systematic studies of interatomic distances in halides and chalcogenides",
        "Acta Crystallographica A", "32", "751",
    ),
    Reference(
        "blundy1994", "Blundy and Wood 1994", "Blundy, J.; Wood, B.", 1994,
        "Prediction of crystal-melt partition coefficients from elastic moduli", "Nature", "372", "452",
    ),
)  # fmt: skip
REFERENCES: dict[str, Reference] = {reference.key: reference for reference in _ALL}


def bibliography(keys: Iterable[str]) -> str:
    """BibTeX entries of the works cited, in order of their keys."""
    note = "% Titles and pages as recalled: check them against the works before printing.\n\n"
    return note + "\n".join(REFERENCES[key].bibtex() for key in sorted(set(keys)))
