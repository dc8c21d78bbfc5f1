"""What a measurement leaves behind: tables, figures, the report, and the folder that holds them."""

from fathomline.report.figures import residual_summary, save_figures, velocity_stack
from fathomline.report.folder import RESULT_FILES, check_target, default_folder, write_result
from fathomline.report.numbers import plain_number, value_with_error
from fathomline.report.page import render_report

__all__ = [
    "RESULT_FILES",
    "check_target",
    "default_folder",
    "plain_number",
    "render_report",
    "residual_summary",
    "save_figures",
    "value_with_error",
    "velocity_stack",
    "write_result",
]
