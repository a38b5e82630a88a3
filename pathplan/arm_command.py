"""The command that shows an arm: pathplan arm."""

from __future__ import annotations

import argparse
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.picture_commands import Shell

__all__ = ["add_arm_command"]

ABOUT = """\
Show an arm: its joints and limits, how far it reaches, what its axes make of it and how its inverse
is solved, its branches, positions, tools and payloads, and what of it looks wrong. A URDF file can
be shown alone; to plan with it takes an arm file, and --template prints one to fill in."""
EXAMPLES = """\
examples:
  pathplan arm robots/glazer6.toml
  pathplan arm their-arm.urdf --tip-link tool0
  pathplan arm their-arm.urdf --template > their-arm.toml
      an arm file with everything that the URDF file lacks to be filled in
  pathplan arm robots/sorter4.toml --json

"""


def add_arm_command(shell: Shell) -> None:
    """Add the command to the command line."""
    arm = shell.command("arm", partial(_arm, shell), ABOUT, EXAMPLES, "show an arm, or a template of its file")
    arm.add_argument("file", metavar="ARM", help="arm file (.toml), or URDF file (.urdf)")
    arm.add_argument("--template", action="store_true",
                     help="print an arm file in which what is missing is to be filled in")  # fmt: skip
    group = arm.add_argument_group("of a URDF file alone")
    group.add_argument("--base-link", metavar="LINK",
                       help="where the arm begins (default: the link that hangs on nothing)")  # fmt: skip
    group.add_argument("--tip-link", metavar="LINK",
                       help="what carries the tool (default: the end of the longest chain)")  # fmt: skip
    shell.screen_options(arm)


def _arm(shell: Shell, args: argparse.Namespace) -> int:
    if args.template:
        from pathplan.report.arm_template import arm_template

        if args.json:
            raise InputError("argument --json: not allowed with argument --template, which is TOML")
        _only_urdf(args)
        text = arm_template(args.file, args.base_link, args.tip_link)
        if not args.quiet:
            shell.show(text)
        return 0
    from pathplan.report.arm_screen import arm_as_dict, arm_screen

    arm = _loaded(args)
    if args.json:
        shell.show_json({"arm": arm_as_dict(arm)})
    elif not args.quiet:
        shell.show(arm_screen(arm))
    return 0


def _loaded(args: argparse.Namespace) -> Arm:
    from pathplan.arm import load_arm
    from pathplan.arm.load_urdf import sketch

    _only_urdf(args)
    if _is_urdf(args):
        return sketch(args.file, args.base_link, args.tip_link)
    return load_arm(args.file)


def _is_urdf(args: argparse.Namespace) -> bool:
    return Path(args.file).suffix.lower() == ".urdf"


def _only_urdf(args: argparse.Namespace) -> None:
    for option in ("base_link", "tip_link"):
        if getattr(args, option) is not None and not _is_urdf(args):
            raise InputError(f"argument --{option.replace('_', '-')}: only for a URDF file, an arm file names its own")
