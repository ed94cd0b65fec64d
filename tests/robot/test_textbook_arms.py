"""Published and closed-form values: two-link arm, double pendulum, six-axis textbook arm."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import ArrayLike

from monitor.robot.pseudo_inertia import moved, pseudo_inertia, rotation, transform
from monitor.robot.robot import Robot
from monitor.robot.tree import Limits, Tree, TreeArrays, build_tree
from monitor.robot.urdf import parse_urdf


def _chain(axis: str, along: str, masses: list[float], coms: list[float], length: float, moments: str) -> str:
    """Return a two-link URDF whose links lie along one direction; `moments` has one place for I."""
    x, y, z = (float(word) for word in along.split())

    def at(distance: float) -> str:
        return f'<origin xyz="{distance * x} {distance * y} {distance * z}"/>'

    inertias = (0.045, 0.022) if moments != "point" else (1e-12, 1e-12)
    template = 'ixx="{0}" iyy="{0}" izz="{0}"' if moments == "point" else moments
    links = "".join(
        f'<link name="bar_{k}"><inertial>{at(com)}<mass value="{mass}"/>'
        f"<inertia {template.format(inertia)}/></inertial></link>"
        for k, (mass, com, inertia) in enumerate(zip(masses, coms, inertias, strict=True))
    )
    return f"""<robot name="two bars"><link name="base"/>{links}
      <joint name="first" type="continuous">
        <parent link="base"/><child link="bar_0"/><axis xyz="{axis}"/></joint>
      <joint name="second" type="continuous">
        <parent link="bar_0"/><child link="bar_1"/><axis xyz="{axis}"/>{at(length)}</joint></robot>"""


def _printed(values: ArrayLike, table: ArrayLike, decimals: int) -> bool:
    """Whether values agree with a printed table to its last decimal."""
    return bool(np.abs(np.asarray(values) - table).max() < 0.51 * 10.0**-decimals)


# The same arm drawn in a vertical plane x-z, and in the plane x-y of a mount tilted so that y points up.
DRAWINGS = {
    "upright": ("0 -1 0", 'ixx="0.001" iyy="{0}" izz="{0}"', (0.0, 0.0, -9.81)),
    "tilted mount": ("0 0 1", 'ixx="0.001" iyy="{0}" izz="{0}"', (0.0, -9.81, 0.0)),
}


@pytest.mark.parametrize(("axis", "moments", "gravity"), DRAWINGS.values(), ids=DRAWINGS)
def test_two_link_arm_agrees_with_its_closed_form(
    axis: str, moments: str, gravity: tuple[float, float, float]
) -> None:
    """Planar two-link arm, closed form as in any robotics textbook."""
    urdf = _chain(axis, "1 0 0", [2.0, 1.5], [0.25, 0.2], 0.5, moments)
    robot = Robot(build_tree(parse_urdf(urdf), "fixed"), gravity)
    q, v, a = np.array([0.3, -0.7]), np.array([1.1, -0.4]), np.array([0.6, -1.3])
    M, C, g = robot.dynamics(q, v)
    p, Ctv = robot.momentum(q, v)
    assert _printed(M, [[0.8564526562, 0.1967263281], [0.1967263281, 0.082]], 10)
    assert _printed(C, [[-0.0386530612, 0.0676428572], [-0.1062959184, 0.0]], 10)
    assert _printed(Ctv, [0.0, 0.0744071429], 10)
    assert _printed(g, [14.4254962033, 2.7106825054], 10)
    assert _printed(M @ a + C @ v + g, [14.6140480602, 2.6051927920], 10)
    assert _printed(p, [0.8634073906, 0.1835989609], 10)
    assert 0.5 * v @ p == pytest.approx(0.4381542726, abs=1e-10)


def test_equal_double_pendulum_swings_at_its_two_frequencies() -> None:
    """Small oscillations of the equal double pendulum: ω² = (g/l)(2 ∓ √2), any mechanics textbook."""
    urdf = _chain("0 1 0", "0 0 -1", [1.3, 1.3], [1.0, 1.0], 1.0, "point")
    robot = Robot(build_tree(parse_urdf(urdf), "fixed"))
    rest, step = np.zeros(2), 1e-5
    stiffness = [
        (robot.dynamics(d, rest).g - robot.dynamics(-d, rest).g) / (2.0 * step) for d in step * np.eye(2)
    ]
    squares = np.linalg.eigvals(np.linalg.solve(robot.dynamics(rest, rest).M, np.array(stiffness)))
    frequencies = np.sort(np.sqrt(squares))
    assert np.allclose(frequencies, np.sqrt(9.81 * (2.0 + np.array([-1.0, 1.0]) * np.sqrt(2.0))), rtol=1e-8)
    assert np.allclose(frequencies, [2.39720, 5.78735], rtol=0.0, atol=5e-6)


def _six_axis_arm() -> Tree:
    """Return the six-axis arm from its standard Denavit-Hartenberg table.

    Its published inertias are simplified and some are not realizable, so that it exists as arrays only.
    """
    alpha = np.array([np.pi / 2, 0.0, -np.pi / 2, np.pi / 2, -np.pi / 2, 0.0])
    a = [0.0, 0.4318, 0.0203, 0.0, 0.0, 0.0]
    d = [0.0, 0.0, 0.15005, 0.4318, 0.0, 0.0]
    mass = [0.0, 17.4, 4.8, 0.82, 0.34, 0.09]
    com = [
        (0.0, 0.0, 0.0), (-0.3638, 0.006, 0.2275), (-0.0203, -0.0141, 0.070),
        (0.0, 0.019, 0.0), (0.0, 0.0, 0.0), (0.0, 0.0, 0.032),
    ]  # fmt: skip
    inertia = [
        (0.0, 0.35, 0.0), (0.13, 0.524, 0.539), (0.066, 0.086, 0.0125),
        (1.8e-3, 1.3e-3, 1.8e-3), (0.3e-3, 0.4e-3, 0.3e-3), (0.15e-3, 0.15e-3, 0.04e-3),
    ]  # fmt: skip
    gear = np.array([-62.6111, 107.815, -53.7063, 76.0364, 71.923, 76.686])
    rotor = np.array([2e-4, 2e-4, 2e-4, 33e-6, 33e-6, 33e-6])
    # From the frame that turns with the joint to the table's frame at the far end of the link.
    far = [transform(rotation((alpha[k], 0.0, 0.0)), (a[k], 0.0, d[k])) for k in range(6)]
    near = [np.eye(4), *far[:-1]]
    arrays = TreeArrays(
        parent=np.arange(-1, 5),
        kind=np.zeros(6, dtype=np.int64),
        dof=np.arange(6),
        multiplier=np.ones(6),
        offset=np.zeros(6),
        R_PJ=np.array([T[:3, :3] for T in near]),
        p_PJ=np.array([T[:3, 3] for T in near]),
        axis=np.tile([0.0, 0.0, 1.0], (6, 1)),
        E=np.array([moved(pseudo_inertia(mass[k], com[k], np.diag(inertia[k])), far[k]) for k in range(6)]),
    )
    return Tree(
        name="six-axis textbook arm",
        base="fixed",
        joints=tuple(f"joint_{k}" for k in range(1, 7)),
        joint_kinds=("revolute",) * 6,
        limits=Limits(*np.full((4, 6), np.inf)),
        damping=np.zeros(6),
        friction=np.zeros(6),
        armature=gear**2 * rotor,
        arrays=arrays,
        links=(),
        n=6,
        nq=6,
    )


def test_six_axis_textbook_arm_agrees_with_its_published_matrices() -> None:
    """Explicit dynamic model and inertial parameters of a six-axis arm, ICRA 1986, pp. 510-518.

    Reference and parameters from memory; they reproduce the published four decimals.
    """
    robot = Robot(_six_axis_arm(), (0.0, 0.0, -9.81))
    q = np.array([0.0, np.pi / 4, np.pi, 0.0, np.pi / 4, 0.0])
    v = np.array([1.0, 2.0, 3.0, 1.0, 2.0, 3.0])
    M, C, g = robot.dynamics(q, v)
    assert _printed(g, [0.0, 31.6399, 6.0351, 0.0, 0.0283, 0.0], 4)
    assert _printed(
        M,
        [
            [3.6594, -0.4044, 0.1006, -0.0025, 0.0, 0.0],
            [-0.4044, 4.4137, 0.3509, 0.0, 0.0024, 0.0],
            [0.1006, 0.3509, 0.9378, 0.0, 0.0015, 0.0],
            [-0.0025, 0.0, 0.0, 0.1925, 0.0, 0.0],
            [0.0, 0.0024, 0.0015, 0.0, 0.1713, 0.0],
            [0.0, 0.0, 0.0, 0.0, 0.0, 0.1941],
        ],
        4,
    )
    assert _printed(
        C,
        [
            [-0.1735, -2.0494, -0.1178, -0.0002, -0.0045, 0.0001],
            [0.6274, 1.1572, 1.9287, -0.0015, -0.0003, 0.0],
            [-0.3608, -0.7734, -0.0018, -0.0009, -0.0064, 0.0],
            [0.0011, 0.0005, -0.0001, 0.0002, 0.0002, -0.0001],
            [-0.0002, 0.0028, 0.0046, -0.0002, 0.0, 0.0],
            [0.0001, 0.0, 0.0, 0.0, 0.0, 0.0],
        ],
        4,
    )
    assert _printed(robot.momentum(q, v)[0], [3.1500, 9.4805, 3.6189, 0.1901, 0.3519, 0.5823], 4)
