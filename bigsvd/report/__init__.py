"""Words, numbers and tables about a run, and its progress: pure functions that open nothing."""

from bigsvd.report.comparison import verification_facts, verification_lines
from bigsvd.report.components import component_lines
from bigsvd.report.demonstration import demo_facts, demo_lines
from bigsvd.report.foresight import announcement, plan_facts, plan_lines
from bigsvd.report.listing import command_line, survey_facts, survey_lines
from bigsvd.report.plain import Json, plain
from bigsvd.report.progress import show_progress
from bigsvd.report.summary import decomposition_facts, summary_lines, xarray_line

__all__ = [
    "Json",
    "announcement",
    "command_line",
    "component_lines",
    "decomposition_facts",
    "demo_facts",
    "demo_lines",
    "plain",
    "plan_facts",
    "plan_lines",
    "show_progress",
    "summary_lines",
    "survey_facts",
    "survey_lines",
    "verification_facts",
    "verification_lines",
    "xarray_line",
]
