"""The command `limbtell`. Sub-commands of other packages join by the entry-point group `limbtell.commands`.

Exit codes: 0 done or stopped on request; 1 a session is damaged; 2 wrong input or failed
to start; 3 the loop died too often.
"""

from __future__ import annotations

import json
import math
import sys
import warnings
from importlib.metadata import entry_points, packages_distributions, version
from pathlib import Path
from typing import Annotated, Any, Literal

import typer
from rich.console import Console
from rich.table import Table

from monitor.errors import LimbtellError, SystemFault

CAUTION = (
    "limbtell is a monitoring aid, not a safety function: it has no performance level and never replaces a "
    "protective stop. Follow the maker's instructions, the risk assessment and local codes, and leave safety "
    "functions to qualified people."
)

app = typer.Typer(
    name="limbtell",
    help=f"Tells torque from the world from torque of the robot itself. {CAUTION}",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")]


def _print_version(wanted: bool) -> None:
    if wanted:
        typer.echo(version("limbtell"))
        raise typer.Exit


@app.callback()
def _limbtell(
    show_version: Annotated[
        bool, typer.Option("--version", callback=_print_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    pass


@app.command()
def init(
    urdf: Annotated[Path, typer.Argument(help="Robot description.")],
    out: Annotated[Path, typer.Option("-o", "--out", help="Configuration file to write.")],
    base: Annotated[str, typer.Option(help="fixed or floating.")] = "fixed",
    datasheet: Annotated[Path | None, typer.Option(help="JSON with figures of the joints.")] = None,
) -> None:
    """Write a commented configuration for a robot description; every key is explained in it."""
    from monitor.setup.template import write_config

    kind = _base(base)
    text = write_config(urdf, kind, datasheet, out.resolve().parent)
    try:
        with out.open("x", encoding="utf-8") as file:
            file.write(text)
    except FileExistsError:
        raise SystemFault(
            str(out), "a file", "a new name", "Move it away first; nothing is overwritten."
        ) from None
    except OSError as error:
        raise SystemFault(str(out), error.strerror or str(error), "a place to write to") from error
    typer.echo(f"wrote {out}; look it over, then try: limbtell check {out}")


def _base(text: str) -> Literal["fixed", "floating"]:
    if text == "fixed":
        return "fixed"
    if text == "floating":
        return "floating"
    raise SystemFault("--base", repr(text), "fixed or floating")


@app.command()
def check(
    config: Annotated[Path, typer.Argument(help="Configuration file.")], as_json: JsonOption = False
) -> None:
    """Check a configuration and its robot description, and print the model as a table."""
    import numpy as np

    from monitor.robot.robot import Robot
    from monitor.setup.build import build
    from monitor.setup.config import load

    _check_owner()
    setup = build(load(config))
    tree, n = setup.tree, setup.sizes
    q = np.zeros(n.nq)
    if n.base:
        q[3] = 1.0
    g = Robot(tree, setup.config.robot.gravity_vector).dynamics(q, np.zeros(n.n)).g[n.base :]
    rows = [
        _joint_row(setup, i, float(g[tree.joints.index(name)])) for i, name in enumerate(setup.facts.joints)
    ]
    links = [{"link": x.name, "mass": x.mass, "inertia": x.inertia} for x in tree.links]
    calibration = setup.config.robot.calibration
    if as_json:
        head = {"robot": setup.facts.robot, "base": tree.base, "calibration": calibration or None}
        typer.echo(json.dumps({**head, "joints": rows, "links": links, "notes": setup.notes}))
        return
    _print_table(f"{setup.facts.robot}, {tree.base} base: joints in the order of the wire", rows)
    _print_table("links", links)
    typer.echo(f"mass in all: {sum(x.mass for x in tree.links):.3f} kg; the model is physically consistent")
    typer.echo(
        f"model and band: {calibration or 'of the description; wide, because nothing was commissioned'}"
    )
    for note in setup.notes:
        typer.echo(f"note: {note}")


def _joint_row(setup: Any, i: int, gravity_nm: float) -> dict[str, Any]:
    joint, tree = setup.config.robot.joint[i], setup.tree
    k = tree.joints.index(joint.name)
    limits = tree.limits
    low = limits.lower[k] if joint.position_min is None else joint.position_min
    high = limits.upper[k] if joint.position_max is None else joint.position_max
    row = setup.sizes.base + k
    return {
        "order": i,
        "joint": joint.name,
        "kind": tree.joint_kinds[k],
        "sign": joint.sign,
        "from": _finite(low),
        "to": _finite(high),
        "unit": "N" if tree.joint_kinds[k] == "prismatic" else "N m",
        "rated": joint.rated_torque,
        "tau_is": joint.torque_meaning,
        "tau_link": "sensor" if joint.link_torque_sensor else "",
        "armature": float(setup.model.armature[row]),
        "coulomb": float(setup.model.coulomb[row]),
        "viscous": float(setup.model.viscous[row]),
        "least_band": round(_least_band(setup, row), 6),
        "gravity_at_zero": round(gravity_nm, 6),
    }


def _least_band(setup: Any, row: int) -> float:
    """Return the smallest residual of a row that may open an event: nothing moves and nothing is loaded."""
    from monitor.kernels.band import FLOOR

    return float(setup.band.row_limit * math.sqrt(setup.band.fast[row, FLOOR]))


def _finite(value: float) -> float | None:
    """Return a limit, None where there is none."""
    return float(value) if math.isfinite(value) else None


def _print_table(title: str, rows: list[dict[str, Any]]) -> None:
    table = Table(title=title, title_justify="left")
    for name, value in rows[0].items():
        table.add_column(name, justify="left" if isinstance(value, str) else "right")
    for row in rows:
        table.add_row(*(_cell(value) for value in row.values()))
    Console(soft_wrap=not sys.stdout.isatty(), width=None if sys.stdout.isatty() else 200).print(table)


def _cell(value: Any) -> str:
    if value is None:
        return "none"
    return f"{value:.4g}" if isinstance(value, float) else str(value)


@app.command()
def watch(config: Annotated[Path, typer.Argument(help="Configuration file.")]) -> None:
    """Watch a robot until Ctrl-C or SIGTERM."""
    from monitor.daemon import Parent
    from monitor.setup.config import load

    _check_owner()
    parent = Parent(load(config), typer.echo)
    raise typer.Exit(parent.run())


def _check_owner() -> None:
    """Refuse to start where another package owns one of our top-level names: it might be run in our place."""
    owners = packages_distributions()
    for name in ("monitor", "plugins", "replay"):
        if set(owners.get(name, ())) - {"limbtell"}:
            raise SystemFault(
                f"package {name}",
                f"several owners: {', '.join(sorted(set(owners[name])))}",
                "limbtell alone in its environment",
                "Install limbtell into an environment of its own.",
            )


def _warn(message: Warning | str, *_: object) -> None:
    typer.echo(f"limbtell: note: {message}", err=True)


def main() -> None:
    """Run the command; an expected error is one line, not a traceback."""
    # Importing the other packages' commands takes half a second; ours do without.
    ours = [command.callback.__name__ for command in app.registered_commands if command.callback]
    if len(sys.argv) < 2 or sys.argv[1] not in ours:
        for entry in entry_points(group="limbtell.commands"):
            app.command(entry.name)(entry.load())
    warnings.showwarning = _warn  # type: ignore[assignment]
    try:
        app()
    except LimbtellError as error:
        typer.echo(f"limbtell: {error}", err=True)
        sys.exit(2)
