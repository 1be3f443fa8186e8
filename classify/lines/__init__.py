"""Line measurement: the table of features, and equivalent widths, depths and profiles with errors to be trusted."""

from starfathom.classify.lines.direct import BulkLines, measure_many
from starfathom.classify.lines.features import FEATURES, TELLURIC, Feature, FeatureTable

__all__ = ["FEATURES", "TELLURIC", "BulkLines", "Feature", "FeatureTable", "measure_many"]
