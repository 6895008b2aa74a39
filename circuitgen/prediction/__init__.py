"""Predicted connectivity from a run folder, with intervals."""

from circuitgen.prediction.cell_pairs import predict_pairs, read_pairs
from circuitgen.prediction.leave_one_out import check_intervals, leave_one_out
from circuitgen.prediction.pathways import (
    curve,
    everyone,
    predict_window,
    prediction_row,
    recorded_points,
    stored_predictions,
)
from circuitgen.prediction.slices import slice_histogram
from circuitgen.prediction.tables import RunTables

__all__ = [
    "RunTables",
    "check_intervals",
    "curve",
    "everyone",
    "leave_one_out",
    "predict_pairs",
    "predict_window",
    "prediction_row",
    "read_pairs",
    "recorded_points",
    "slice_histogram",
    "stored_predictions",
]
