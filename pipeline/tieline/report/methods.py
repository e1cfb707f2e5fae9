"""The methods paragraph: what was done in this reduction, from its settings and its tables, with citations."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import pyarrow.compute as pc

from tieline.arrays import flags, labels
from tieline.report.conventions import percent
from tieline.report.latex import PREAMBLE, escaped
from tieline.report.left_out import by_person, by_test
from tieline.report.references import REFERENCES
from tieline.report.source import Source
from tieline.report.spots import SpotUse

# In a sentence, [[key]] cites; everything else is printed as it is.
_CITATION = re.compile(r"\[\[([a-z0-9]+(?:;[a-z0-9]+)*)\]\]")
_ESTIMATORS = {
    "random-effects": "with weights from counting uncertainty and from a spread between spots estimated by the method of "
    "Paule and Mandel [[paule1982]]",
    "arithmetic": "as arithmetic means",
    "median": "as medians",
    "huber": "as Huber means",
}
_INTERVALS = {
    "fieller": "by Fieller's theorem [[fieller1954]]",
    "gum-s1": "by propagation of distributions [[jcgm101]]",
    "likelihood": "by profile likelihood",
}


@dataclass(frozen=True)
class Methods:
    """Sentences with citation marks."""

    sentences: tuple[str, ...]

    def keys(self) -> list[str]:
        """Works cited, in the order of first mention."""
        found = [
            key
            for sentence in self.sentences
            for mark in _CITATION.findall(sentence)
            for key in mark.split(";")
        ]
        return list(dict.fromkeys(key for key in found if key in REFERENCES))

    def text(self) -> str:
        """The paragraph in words, then the list of works cited."""
        body = _CITATION.sub(_as_text, " ".join(self.sentences))
        works = sorted((REFERENCES[key] for key in self.keys()), key=lambda one: one.short)
        return "\n".join([body, "", "References", *(one.text() for one in works), ""])

    def paragraph(self) -> str:
        """The paragraph in words alone."""
        return _CITATION.sub(_as_text, " ".join(self.sentences))

    def latex(self) -> str:
        """A document that compiles by itself and cites `references.bib`."""
        lines = [
            "% Methods paragraph; compiles by itself (latex, bibtex, latex, latex). In a manuscript, take the text",
            "% between the marks and add references.bib to its bibliography.",
            PREAMBLE + "\\begin{document}",
            "% --- begin",
            *(_sentence_as_latex(sentence) for sentence in self.sentences),
            "% --- end",
            "\\bibliographystyle{plain}",
            "\\bibliography{references}",
            "\\end{document}",
            "",
        ]
        return "\n".join(lines)


def _as_text(match: re.Match[str]) -> str:
    return f"({'; '.join(REFERENCES[key].short for key in match.group(1).split(';'))})"


def _sentence_as_latex(sentence: str) -> str:
    parts = _CITATION.split(sentence)
    return "".join(
        rf"\cite{{{part.replace(';', ',')}}}" if position % 2 else escaped(part)
        for position, part in enumerate(parts)
    )


def methods(source: Source, spots: SpotUse) -> Methods:
    """The paragraph of one reduction; every number in it is counted from the tables."""
    parts = (_measured, _converted, _calibrated, _screened, _averaged, _limits, _partition, _classified)
    sentences = [sentence for part in parts for sentence in part(source, spots)]
    return Methods((*sentences, f"The reduction was made with tieline {source.version}."))


def _measured(source: Source, spots: SpotUse) -> Iterable[str]:
    unknown = [place for place in range(spots.count) if spots.keys["material"][place] is None]
    experiments = {spots.keys["experiment"][place] for place in unknown}
    yield (
        f"The data set holds {_count(len(unknown), 'analysis', 'analyses')} of {_count(len(experiments), 'experiment')} "
        f"and {_count(spots.count - len(unknown), 'analysis', 'analyses')} of reference materials."
    )
    for technique, number in sorted(Counter(spots.keys["technique"][place] for place in unknown).items()):
        of_phase = Counter(
            spots.keys["phase"][place] for place in unknown if spots.keys["technique"][place] == technique
        )
        phases = ", ".join(f"{phase} {n}" for phase, n in sorted(of_phase.items()))
        yield f"By {technique}: {_count(number, 'spot')} ({phases})."
    yield (
        "Uncertainties of single values are one standard uncertainty from counting, as reported with the data; other "
        "levels and relative figures were converted."
    )


def _converted(source: Source, spots: SpotUse) -> Iterable[str]:
    yield (
        "Oxides were converted to mass fractions of the elements with standard atomic weights [[prohaska2022]]."
    )
    for standard in source.settings.convert.internal_standard:
        actual = (
            f"the mean {standard.element} content of the same phase and experiment by {standard.source_technique}"
            if standard.actual == "probe-mean"
            else f"given {standard.element} contents"
        )
        yield (
            f"Values by {standard.technique} were rescaled, phase by phase, to {actual}; the uncertainty of that content "
            "is carried as common to all elements of the phase."
        )
    for technique, total in source.settings.convert.normalise.items():
        yield f"Values by {technique} were normalised to an oxide total of {total:g} wt%."


def _calibrated(source: Source, spots: SpotUse) -> Iterable[str]:
    calibrate = source.table("calibrate")
    materials = sorted(set(source.table("calibrate.materials").column("material").to_pylist()))
    if materials:
        failed = int(np.sum([passed is False for passed in calibrate.column("passed").to_pylist()]))
        tolerance = source.settings.calibrate.tolerance
        yield (
            f"Accuracy was checked on {', '.join(materials)}: of {_count(calibrate.num_rows, 'pair')} of batch and element, "
            f"{failed} were off by more than {percent(tolerance.relative)} and {tolerance.sigmas:g} standard uncertainties."
        )
    correct = source.settings.calibrate.correct
    done = {
        False: "No correction for bias was applied",
        "bias": "Values were divided by the measured bias",
        "bias+drift": "Values were divided by the measured bias and corrected for linear drift where it was supported "
        f"(p < {source.settings.calibrate.drift_p:g})",
    }[correct]
    yield (
        f"{done}; the calibration uncertainty is shared by all spots of a batch and cancels in D where both phases were "
        "measured in one batch."
    )


def _screened(source: Source, spots: SpotUse) -> Iterable[str]:
    settings = source.settings.screen
    described = [sentence for test, sentence in _tests(source) if getattr(settings, test).enabled]
    if described:
        yield f"Spots were tested for {_and(described)}."
    counts = by_test(spots)
    if counts:
        parts = [
            f"{reason.name} {_count(reason.n_spots, 'spot')} ({reason.n_values} values)" for reason in counts
        ]
        yield f"Left out by tests: {', '.join(parts)}; a spot may fail several."
    else:
        yield "No value was left out by a test."
    people = by_person(source, spots)
    if people:
        parts = [
            f"{reason.name} {_count(reason.n_spots, 'spot')} ({reason.n_values} values)" for reason in people
        ]
        yield f"Left out by hand, with a recorded reason: {', '.join(parts)}."
    kept = sum(ruling.verdict == "keep" for ruling in source.rulings)
    if kept:
        yield f"{_count(kept, 'ruling')} kept values that a test would have left out, or that were in doubt."
    set_aside = int(pc.sum(source.table("ingest.set_aside").column("cells")).as_py() or 0)
    if set_aside:
        yield f"{_count(set_aside, 'cell')} could not be read and were set aside."


def _tests(source: Source) -> Iterable[tuple[str, str]]:
    settings = source.settings.screen
    ferric = (
        ", with ferric iron from charge balance where the phase takes it [[droop1987]]"
        if settings.cations.ferric
        else ""
    )
    yield (
        "total",
        (
            f"oxide totals outside the range of their phase by more than {settings.total.sigmas:g} standard uncertainties "
            f"({_does(settings.total.action)})"
        ),
    )
    yield (
        "cations",
        (
            f"cation sums that do not fit the formula{ferric} ({settings.cations.sigmas:g} standard uncertainties; "
            f"{_does(settings.cations.action)})"
        ),
    )
    yield (
        "identity",
        (
            f"compositions at least {settings.identity.ratio:g} times nearer to another phase ({_does(settings.identity.action)})"
        ),
    )
    overlap = {
        "drop": _does(settings.overlap.action),
        "mark": "marked only",
        "unmix": "removed by calculation",
    }
    yield (
        "overlap",
        (
            f"admixed {settings.overlap.melt_phase} in crystals and crystal in {settings.overlap.melt_phase}, as the weighted "
            f"projection of every analysis on the mixing line, at z > {settings.overlap.z:g} ({overlap[settings.overlap.use]})"
        ),
    )
    represent = {"all": "all spots represent the crystal", "rim": "only rims represent equilibrium",
                 "core": "only cores represent equilibrium"}[settings.zoning.represent]  # fmt: skip
    yield (
        "zoning",
        f"zoning with distance from the rim (p < {settings.zoning.p:g}; in zoned crystals {represent})",
    )
    single = {
        "off": "",
        "grubbs": f", and single analytes by Grubbs's test at {settings.outlier.alpha:g} [[grubbs1969]]",
        "esd": f", and single analytes by the generalized ESD test at {settings.outlier.alpha:g} [[rosner1983]]",
        "modified-z": f", and single analytes by modified z > {settings.outlier.threshold:g} [[iglewicz1993]]",
    }[settings.outlier.per_analyte]
    yield (
        "outlier",
        (
            f"outliers in many analytes together (p < {settings.outlier.p:g}; {_does(settings.outlier.action)}){single}"
        ),
    )
    yield (
        "imprecise",
        (
            f"relative uncertainties above {percent(settings.imprecise.relative_sigma)} ({_does(settings.imprecise.action)})"
        ),
    )


def _does(action: str) -> str:
    return {"drop": "left out", "mark": "marked only"}[action]


def _averaged(source: Source, spots: SpotUse) -> Iterable[str]:
    pair = source.table("pair")
    over = "over grain means" if source.settings.pair.average == "grains" else "over spots"
    n_used = [number for number in pair.column("n_used").to_pylist() if number]
    size = f" (n from {min(n_used)} to {max(n_used)}, median {float(np.median(n_used)):g})" if n_used else ""
    yield (
        f"Phase means of every experiment and element were taken {over}{size}, {_ESTIMATORS[source.settings.pair.mean]}."
    )
    yield (
        "Whether counting explains the scatter was judged by the mean square of weighted deviates [[wendt1991]]; the "
        "standard error of a mean comes from the scatter of the spots."
    )


def _limits(source: Source, spots: SpotUse) -> Iterable[str]:
    below = flags(source.table("convert"), "below_limit") & flags(source.table("screen"), "use")
    only_limit = int(
        np.sum([number or 0 for number in source.table("pair").column("n_limit_only").to_pylist()])
    )
    if not below.any():
        return
    yield (
        f"Of the values used, {int(below.sum())} lie below their detection limit. Measured values below the limit were used "
        "as they are [[amc2001]]; no value was substituted for one."
    )
    if only_limit:
        yield (
            f"Where only a limit was reported ({_count(only_limit, 'value')}), limits of the mean come from the likelihood "
            f"of measured and censored values together; a missing sigma was taken as the limit divided by "
            f"{source.settings.partition.sigma_from_limit:g}."
        )


def _partition(source: Source, spots: SpotUse) -> Iterable[str]:
    classify = source.table("classify")
    made = Counter(labels(classify, "interval").text().tolist())
    ways = [f"{_INTERVALS[name]} ({number})" for name, number in made.most_common() if name in _INTERVALS]
    kinds = Counter(labels(classify, "kind").text().tolist())
    yield (
        "D is the Nernst partition coefficient by mass, concentration in alpha over concentration in beta "
        f"[[beattie1993]]; {_count(classify.num_rows, 'D', 'D')} were formed, of which {kinds['upper-limit']} are upper "
        f"limits, {kinds['lower-limit']} lower limits and {kinds['undetermined']} undetermined."
    )
    yield (
        "Its standard uncertainty (k = 1) combines counting, spread between spots, and calibration and internal-standard "
        f"factors that do not cancel [[jcgm100]]; {percent(source.confidence)} confidence intervals were computed "
        f"{_and(ways)}."
    )


def _classified(source: Source, spots: SpotUse) -> Iterable[str]:
    settings = source.settings.classify
    yield (
        f"An element is called compatible where D > {settings.compatible_above:g}, incompatible below, and highly "
        f"incompatible where D < {settings.highly_incompatible_below:g} (a convention), where the "
        f"{percent(settings.confidence)} interval of D lies inside the class; otherwise its class is left open."
    )
    for name, (low, high) in settings.extra.items():
        yield f"The class {name} was declared where that interval lies between {low:g} and {high:g}."


def _and(parts: list[str]) -> str:
    return (
        parts[0]
        if len(parts) == 1
        else f"{'; '.join(parts[:-1])}; and {parts[-1]}"
        if parts
        else "by no method"
    )


def _count(number: int, one: str, many: str = "") -> str:
    return f"{number} {one if number == 1 else many or one + 's'}"
