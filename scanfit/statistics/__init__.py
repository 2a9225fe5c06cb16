"""Statistics of a finished scan: credible regions, profile likelihood, what decides where, agreement of explorers."""

from scanfit.statistics.comparison import compare
from scanfit.statistics.decides import decision_map, term_records
from scanfit.statistics.marginals import intervals
from scanfit.statistics.profile import profile_table

__all__ = ["compare", "decision_map", "intervals", "profile_table", "term_records"]
