"""The commands, one module each; every ``run_x`` imports what it needs when it runs."""

from circuitgen.commands.audit import add_audit_command
from circuitgen.commands.build import add_build_command
from circuitgen.commands.grow import add_grow_command
from circuitgen.commands.inspect import add_inspect_command
from circuitgen.commands.new import add_new_command
from circuitgen.commands.predict import add_predict_command
from circuitgen.commands.report import add_report_command

__all__ = [
    "add_audit_command",
    "add_build_command",
    "add_grow_command",
    "add_inspect_command",
    "add_new_command",
    "add_predict_command",
    "add_report_command",
]
