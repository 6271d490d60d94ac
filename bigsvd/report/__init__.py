"""Words, numbers and tables about a run, its progress, its log and its status file; nothing else is opened."""

from bigsvd.report.comparison import verification_facts, verification_lines
from bigsvd.report.components import component_lines
from bigsvd.report.demonstration import demo_facts, demo_lines
from bigsvd.report.foresight import announcement, plan_facts, plan_lines
from bigsvd.report.listing import command_line, survey_facts, survey_lines
from bigsvd.report.plain import Json, plain
from bigsvd.report.progress import show_progress
from bigsvd.report.standing import going_on_line, going_on_words, standing_facts, standing_lines, standing_words
from bigsvd.report.status import read_status
from bigsvd.report.summary import decomposition_facts, summary_lines, xarray_line
from bigsvd.report.unattended import Listeners, watch

__all__ = [
    "Json",
    "Listeners",
    "announcement",
    "command_line",
    "component_lines",
    "decomposition_facts",
    "demo_facts",
    "demo_lines",
    "going_on_line",
    "going_on_words",
    "plain",
    "plan_facts",
    "plan_lines",
    "read_status",
    "show_progress",
    "standing_facts",
    "standing_lines",
    "standing_words",
    "summary_lines",
    "survey_facts",
    "survey_lines",
    "verification_facts",
    "verification_lines",
    "watch",
    "xarray_line",
]
