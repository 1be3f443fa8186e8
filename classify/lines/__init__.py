"""Line measurement: the table of features, and equivalent widths, depths and profiles with errors to be trusted."""

from starfathom.classify.lines.direct import BulkLines, measure_many
from starfathom.classify.lines.features import FEATURES, TELLURIC, Feature, FeatureTable
from starfathom.classify.lines.profile_fits import BulkFits, fit_many
from starfathom.classify.lines.table import LineTable, measure_lines

__all__ = ["FEATURES", "TELLURIC", "BulkFits", "BulkLines", "Feature", "FeatureTable", "LineTable", "fit_many",
           "measure_lines", "measure_many"]
