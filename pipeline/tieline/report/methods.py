"""The methods paragraph: what was done in this reduction, from its settings and its tables, with citations."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from tieline.arrays import flags, labels, numbers
from tieline.chemistry.names import recognise_analyte
from tieline.report.conventions import percent
from tieline.report.latex import PREAMBLE, escaped
from tieline.report.left_out import ruled_references
from tieline.report.methods_screening import screened
from tieline.report.references import REFERENCES
from tieline.report.sentences import and_, count
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
    parts = (_measured, _converted, _calibrated, screened, _averaged, _limits, _partition, _classified)
    sentences = [sentence for part in parts for sentence in part(source, spots)]
    return Methods((*sentences, f"The reduction was made with tieline {source.version}."))


def _measured(source: Source, spots: SpotUse) -> Iterable[str]:
    unknown = [place for place in range(spots.count) if spots.keys["material"][place] is None]
    experiments = {spots.keys["experiment"][place] for place in unknown}
    n_reference = spots.count - len(unknown)
    of_materials = (
        f" and {count(n_reference, 'analysis', 'analyses')} of reference materials" if n_reference else ""
    )
    yield (
        f"The data set holds {count(len(unknown), 'analysis', 'analyses')} of {count(len(experiments), 'experiment')}"
        f"{of_materials}."
    )
    for technique, number in sorted(Counter(spots.keys["technique"][place] for place in unknown).items()):
        of_phase = Counter(
            spots.keys["phase"][place] for place in unknown if spots.keys["technique"][place] == technique
        )
        phases = ", ".join(f"{phase} {n}" for phase, n in sorted(of_phase.items()))
        yield f"By {technique}: {count(number, 'spot')} ({phases})."
    yield from _uncertainties(source)


def _uncertainties(source: Source) -> Iterable[str]:
    """What the uncertainties of single values are, and of which techniques none were reported."""
    convert = source.table("convert")
    technique = labels(convert, "technique").text()
    known = np.isfinite(numbers(convert, "sigma_ppm"))
    reported = sorted(set(technique[known].tolist()))
    silent = sorted(set(technique.tolist()) - set(reported))
    if reported:
        yield (
            "Uncertainties of single values are one standard uncertainty from counting, as reported with the data; other "
            "levels and relative figures were converted."
        )
    if silent:
        yield f"No uncertainties of single values were reported by {', '.join(silent)}."


def _converted(source: Source, spots: SpotUse) -> Iterable[str]:
    names = (recognise_analyte(text) for text in labels(source.table("convert"), "analyte").texts)
    if any(name is not None and name.kind == "oxide" for name in names):
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
        verdicts = [passed for passed in calibrate.column("passed").to_pylist() if passed is not None]
        tolerance = source.settings.calibrate.tolerance
        yield (
            f"Accuracy was checked on {', '.join(materials)}: of {count(len(verdicts), 'pair')} of batch and element, "
            f"{verdicts.count(False)} were off by more than {percent(tolerance.relative)} and {tolerance.sigmas:g} "
            "standard uncertainties."
        )
    people = ruled_references(source, spots)
    if people:
        parts = [
            f"{reason.name} {count(reason.n_spots, 'spot')} ({count(reason.n_values, 'value')})"
            for reason in people
        ]
        yield f"Analyses of reference materials left out by hand, with a recorded reason: {', '.join(parts)}."
    correct = source.settings.calibrate.correct
    done = {
        False: "No correction for bias was applied",
        "bias": "Values were divided by the measured bias",
        "bias+drift": "Values were divided by the measured bias and corrected for linear drift where it was supported "
        f"(p < {source.settings.calibrate.drift_p:g})",
    }[correct]
    known = set(labels(calibrate, "origin").text().tolist()) != {"unknown"}
    elsewhere = "" if known else "; it is not known, and not carried elsewhere"
    yield (
        f"{done}; the calibration uncertainty is shared by all spots of a batch and cancels in D where both phases were "
        f"measured in one batch{elsewhere}."
    )


def _averaged(source: Source, spots: SpotUse) -> Iterable[str]:
    pair = source.table("pair")
    over = "over grain means" if source.settings.pair.average == "grains" else "over spots"
    n_used = [number for number in pair.column("n_used").to_pylist() if number]
    size = f" (n from {min(n_used)} to {max(n_used)}, median {float(np.median(n_used)):g})" if n_used else ""
    judged = bool(np.isfinite(numbers(pair, "mswd")).any())
    estimator = source.settings.pair.mean
    # Without uncertainties nothing tells the spots apart, and their weights are equal.
    way = "as arithmetic means" if estimator == "random-effects" and not judged else _ESTIMATORS[estimator]
    yield f"Phase means of every experiment and element were taken {over}{size}, {way}."
    scatter = "the standard error of a mean comes from the scatter of the spots."
    if judged:
        yield (
            "Whether counting explains the scatter was judged by the mean square of weighted deviates [[wendt1991]]; "
            + scatter
        )
    else:
        yield scatter.capitalize()


def _limits(source: Source, spots: SpotUse) -> Iterable[str]:
    below = flags(source.table("convert"), "below_limit") & flags(source.table("screen"), "use")
    only_limit = int(
        np.sum([number or 0 for number in source.table("pair").column("n_limit_only").to_pylist()])
    )
    if not below.any():
        return
    measured = (
        "Measured values below the limit were used as they are [[amc2001]]; no value was substituted for one."
    )
    yield (
        f"Of the values used, {int(below.sum())} lie below their detection limit. "
        + (measured if int(below.sum()) > only_limit else "No value was substituted for one.")
    )
    if only_limit:
        yield (
            f"Where only a limit was reported ({count(only_limit, 'value')}), limits of the mean come from the likelihood "
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
        f"[[beattie1993]]; {count(classify.num_rows, 'D', 'D')} were formed, of which {kinds['upper-limit']} are upper "
        f"limits, {kinds['lower-limit']} lower limits and {kinds['undetermined']} undetermined."
    )
    factors = (
        "calibration and internal-standard" if source.settings.convert.internal_standard else "calibration"
    )
    yield (
        f"Its standard uncertainty (k = 1) combines counting, spread between spots, and {factors} factors that do not "
        f"cancel [[jcgm100]]; {percent(source.confidence)} confidence intervals were computed "
        f"{and_(ways) or 'by no method'}."
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
