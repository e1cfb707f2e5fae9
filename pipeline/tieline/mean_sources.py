"""The phase means of `pair` and everything that makes them uncertain, as the propagation and the intervals need it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pyarrow as pa
from scipy import special

from tieline.arrays import BoolArray, FloatArray, IntArray, Labels, flags, labels, numbers
from tieline.correction import CALIBRATION_KEYS, SOURCE_KEYS, STANDARD_KEYS, calibrate_row
from tieline.propagation import Side
from tieline.statistics.means import MeanEstimate

LABELS = ("experiment", "phase", "element", "technique", "batch", "analyte")


class MeanSources:
    """Row by row of `pair`: means, standard errors, and the relative uncertainties of their factors.

    Unknown uncertainties are 0 in the arrays and False in `calibration_known` and `standard_known`, so that a D
    which needs them can say so.
    """

    def __init__(self, pair: pa.Table, calibrate: pa.Table) -> None:
        self.labels: dict[str, Labels] = {name: labels(pair, name) for name in LABELS}
        self.mean, self.se, self.counting_se, self.dof, self.counting_sd = (
            numbers(pair, name)
            for name in ("mean_ppm", "se_ppm", "counting_se_ppm", "dof", "counting_sd_ppm")
        )
        self.n = np.asarray(numbers(pair, "n_used"), dtype=np.int64)
        self.n_independent = np.asarray(numbers(pair, "n_independent"), dtype=np.int64)
        self._read_calibration(pair, calibrate)
        self._read_standard(pair, calibrate)

    def _read_calibration(self, pair: pa.Table, calibrate: pa.Table) -> None:
        row = calibrate_row(pair, calibrate)

        def of_row(name: str, otherwise: float) -> FloatArray:
            values: FloatArray = np.append(numbers(calibrate, name), otherwise)[row]
            return values

        shared = of_row("relative_sd", np.nan)
        self.calibration_known: BoolArray = np.isfinite(shared)
        self.calibration = np.nan_to_num(shared)
        self.calibration_dof = of_row("relative_dof", np.nan)
        self.calibration_key = _keys([self.labels[name] for name in CALIBRATION_KEYS])
        self.matrix = of_row("matrix_sd", 0.0)
        place = np.nan_to_num(numbers(pair, "mean_sequence") - of_row("drift_centre", np.nan))
        # What a drift that stays in the values shifts the mean by, relative.
        self.drift = of_row("drift_left", 0.0) * place

    def _read_standard(self, pair: pa.Table, calibrate: pa.Table) -> None:
        applies = flags(pair, "internal_standard")
        sd = numbers(pair, "internal_standard_sd")
        source = [labels(pair, name) for name in SOURCE_KEYS]
        measured = source[0].codes >= 0
        behind = np.append(numbers(calibrate, "relative_sd"), np.nan)[
            calibrate_row(pair, calibrate, SOURCE_KEYS)
        ]
        alone = -1 - np.arange(pair.num_rows)
        self.standard_known: BoolArray = ~applies | np.isfinite(sd)
        self.internal_standard = np.nan_to_num(sd)
        self.internal_standard_dof = numbers(pair, "internal_standard_dof")
        self.internal_standard_key: IntArray = np.where(
            applies, _keys([self.labels[name] for name in STANDARD_KEYS]), alone
        )
        self.standard_calibration_known: BoolArray = ~measured | np.isfinite(behind)
        self.standard_calibration = np.where(measured, np.nan_to_num(behind), 0.0)
        self.standard_calibration_key: IntArray = np.where(measured, _keys(source), alone)
        # The measurement behind a standard, in the numbering of the calibrations: what D's share with it.
        self.source_of_standard: IntArray = np.where(
            measured, _joint_keys([self.labels[name] for name in CALIBRATION_KEYS], source), alone
        )

    def side(self, rows: IntArray) -> Side:
        """One phase of the D's whose means stand in `rows`."""
        # A mean's counting part can exceed what its scatter shows; D_sd is that of the scatter, so it is cut there.
        mean = np.where(self.mean[rows] == 0, np.nan, np.abs(self.mean[rows]))
        total = np.nan_to_num(self.se[rows] / mean)
        counting = np.fmin(np.nan_to_num(self.counting_se[rows] / mean), total)
        spread = np.sqrt(np.maximum(total**2 - counting**2, 0.0))
        return Side(
            self.mean[rows],
            counting,
            spread,
            self.calibration[rows],
            self.calibration_key[rows],
            self.matrix[rows],
            self.internal_standard[rows],
            self.internal_standard_key[rows],
            self.standard_calibration[rows],
            self.standard_calibration_key[rows],
        )

    def with_drift(self, sides: tuple[Side, Side], alpha: IntArray, beta: IntArray) -> tuple[Side, Side]:
        """The sides with the drift between them: within a batch its difference, across batches both parts."""
        a, b = self.drift[alpha], self.drift[beta]
        if not a.any() and not b.any():
            return sides
        same = self.calibration_key[alpha] == self.calibration_key[beta]
        drift = np.where(same, np.abs(a - b), np.hypot(a, b))
        return replace(sides[0], matrix=np.hypot(sides[0].matrix, drift)), sides[1]

    def widened(self, side: Side, rows: IntArray, confidence: float) -> Side:
        """The side as an interval needs it: factors known from few measurements count by Student's quantile.

        Each is multiplied by t over the normal quantile, as if it alone made the interval; own choice.
        """
        return replace(
            side,
            calibration=side.calibration * _widening(self.calibration_dof[rows], confidence),
            internal_standard=side.internal_standard
            * _widening(self.internal_standard_dof[rows], confidence),
        )

    def estimate(self, rows: IntArray) -> MeanEstimate:
        return MeanEstimate(
            self.mean[rows],
            self.se[rows] ** 2,
            self.counting_se[rows] ** 2,
            np.nan_to_num(self.dof[rows]),
            self.n_independent[rows],
        )

    def unknown(self, alpha: IntArray, beta: IntArray) -> tuple[BoolArray, BoolArray]:
        """D's that need a calibration, and D's that need an internal standard, whose uncertainty is unknown."""
        apart = self.calibration_key[alpha] != self.calibration_key[beta]
        calibration = apart & ~(self.calibration_known[alpha] & self.calibration_known[beta])
        elsewhere = self.standard_calibration_key[alpha] != self.standard_calibration_key[beta]
        calibration |= elsewhere & ~(
            self.standard_calibration_known[alpha] & self.standard_calibration_known[beta]
        )
        different = self.internal_standard_key[alpha] != self.internal_standard_key[beta]
        return calibration, different & ~(self.standard_known[alpha] & self.standard_known[beta])


def _widening(dof: FloatArray, confidence: float) -> FloatArray:
    known = dof > 0
    tail = 0.5 + 0.5 * confidence
    if not known.any():
        return np.ones_like(dof)
    t = special.stdtrit(np.where(known, dof, 1.0), tail)
    return np.where(known, t / special.ndtri(tail), 1.0)


def _keys(columns: list[Labels]) -> IntArray:
    """One number per combination of labels."""
    key = np.zeros(len(columns[0].codes), dtype=np.int64)
    for column in columns:
        key = key * (len(column.texts) + 1) + column.codes + 1
    return key


def _joint_keys(columns: list[Labels], others: list[Labels]) -> IntArray:
    """The combinations of `others` in the numbering that `_keys` gives `columns`; -1 where it has none."""
    key = np.zeros(len(columns[0].codes), dtype=np.int64)
    missing = np.zeros(len(key), dtype=np.bool_)
    for column, other in zip(columns, others, strict=True):
        place = {text: code for code, text in enumerate(column.texts)}
        codes = np.array([*(place.get(text, -1) for text in other.texts), -1], dtype=np.int64)[other.codes]
        missing |= codes < 0
        key = key * (len(column.texts) + 1) + codes + 1
    return np.where(missing, -1, key)
