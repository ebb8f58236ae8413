"""Advice against constants and full search. Read policies, bench, course, one_step, whole_stream, results, contest,
statistics, tables, in this order.
"""

from hyperforecast.workshop.contest.contest import Progress, run_contest
from hyperforecast.workshop.contest.policies import CEILING, FLOOR, POLICIES, Policy
from hyperforecast.workshop.contest.results import CONTESTS, Contest, load_contest
from hyperforecast.workshop.contest.tables import as_text, summarize

__all__ = ["CEILING", "CONTESTS", "Contest", "FLOOR", "POLICIES", "Policy", "Progress", "as_text", "load_contest",
           "run_contest", "summarize"]
