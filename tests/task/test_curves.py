"""Curves and taught paths as they are read: columns, orientations, smoothing, and what is said of bad files."""

import hashlib
import re

import numpy as np
import pytest
from scipy.interpolate import PPoly
from scipy.spatial.transform import Rotation
from spatialmath import SE3

from pathplan.errors import InputError
from pathplan.quaternions import angles_between, quaternion_product, rotations, steady_quaternions
from pathplan.task.csvfile import MOST_POINTS
from pathplan.task.curves import curve_through

HEAD = """\
arm = "bench6.toml"
cycle = "4 ms"
start = "home"

[frames.part]
xyz = [500, 100, 200]
rpy = [0, 0, 30]

[curves.rim]
points = "rim.csv"
frame = "part"
rpy = [180, 0, 0]

[[step]]
motion = "line"
to = "rim.start"

[[step]]
motion = "curve"
along = "rim"
"""
TAUGHT = """\
arm = "bench6.toml"
cycle = "4 ms"
start = "home"

[taught.hop]
points = "hop.csv"

[[step]]
motion = "joint"
to = "hop.start"

[[step]]
motion = "taught"
along = "hop"
"""
PART = SE3(0.5, 0.1, 0.2) * SE3.Rz(30, "deg")
XYZ = "x,y,z\n0,0,0\n10,1,0\n20,0,1\n30,-1,0\n40,0,0\n50,2,0\n60,0,0\n"
JOINTS = "turn,lift,bend,roll,tip,flange\n0,-30,60,0,60,0\n5,-25,55,2,50,0\n9,-30,50,0,60,10\n"


@pytest.fixture
def read(tmp_path, load):
    """read(csv, changes): the task of HEAD with a curve through the points of a CSV text."""

    def read_text(csv, old="", new="", text=HEAD):
        name = "rim.csv" if "curves" in text else "hop.csv"
        (tmp_path / name).write_text(csv, encoding="utf-8")
        assert old in text
        return load(text.replace(old, new, 1) if old else text)

    return read_text


def complaint(read, *args, **more):
    with pytest.raises(InputError) as caught:
        read(*args, **more)
    assert str(caught.value).isprintable()
    return str(caught.value)


def evaluate(curve, s):
    """Positions (N, 3) and rotations (N, 3, 3) by scipy."""
    position = PPoly(curve.position, curve.breaks)(s)
    quaternion = PPoly(curve.quaternion, curve.breaks)(s)
    return position, Rotation.from_quat(quaternion, scalar_first=True).as_matrix()


def table(points):
    return "x,y,z\n" + "".join(f"{x!r},{y!r},{z!r}\n" for x, y, z in np.asarray(points, dtype=float).tolist())


def test_a_curve_goes_through_its_points(read):
    step = read(XYZ).steps[1]
    curve, points = step.curve, np.array([line.split(",") for line in XYZ.splitlines()[1:]], dtype=float) / 1e3
    s = np.linspace(0, curve.breaks[-1], 20001)
    position, rotation = evaluate(curve, s)
    nearest = np.linalg.norm(position[:, None] - points, axis=2).min(axis=0)
    assert nearest.max() < 3e-6  # as fine as the samples lie
    assert curve.deviation < 1e-15
    np.testing.assert_allclose(rotation, np.tile(np.diag([1.0, -1, -1]), (len(s), 1, 1)), atol=1e-12)
    for order in range(5):  # C4
        poly = PPoly(curve.position, curve.breaks)
        left = poly(np.nextafter(curve.breaks[1:-1], 0), order)
        np.testing.assert_allclose(left, poly(curve.breaks[1:-1], order), rtol=1e-6, atol=1e-6)
    assert 'curve "rim" passes through its 7 points, and between them ' in curve.note


def test_its_ends_are_poses_and_it_ends_at_its_target(read):
    task = read(XYZ)
    start, end = PART * SE3.Rx(180, "deg"), PART * SE3(0.06, 0, 0) * SE3.Rx(180, "deg")
    assert task.pose(task.steps[0].target) == pytest.approx(start.A, abs=1e-12)
    assert task.pose(task.steps[1].target) == pytest.approx(end.A, abs=1e-12)
    back = read(XYZ, 'to = "rim.start"', 'to = "rim.end"\noffset = { tool = [0, 0, -50] }')
    assert back.pose(back.steps[0].target) == pytest.approx((end * SE3(0, 0, -0.05)).A, abs=1e-12)


def test_files_read_are_among_the_sources(read):
    task = read(XYZ)
    assert task.sources["rim.csv"] == hashlib.sha256(XYZ.encode()).hexdigest()


def test_two_points_make_a_straight_line(read):
    curve = read("x,y,z\n0,0,0\n30,40,0\n").steps[1].curve
    position, _ = evaluate(curve, np.linspace(0, curve.breaks[-1], 5))
    np.testing.assert_allclose(position, np.linspace([0, 0, 0], [0.03, 0.04, 0], 5), atol=1e-15)


@pytest.mark.parametrize("count", [3, 4, 5, 6, 9])
def test_few_points(read, count):
    x = np.linspace(0, 80, count)
    curve = read(table(np.stack([x, x**2 / 200, 0 * x], axis=1))).steps[1].curve
    poly = PPoly(curve.position, curve.breaks)
    assert poly(0) == pytest.approx([0, 0, 0], abs=1e-15)
    assert poly(curve.breaks[-1]) == pytest.approx([0.08, 0.032, 0], abs=1e-15)


def circle(count, noise=0.0, seed=0):
    a = np.linspace(0, 1.9 * np.pi, count)
    points = 80 * np.stack([np.cos(a), np.sin(a), 0 * a], axis=1)
    return points + np.random.default_rng(seed).normal(0, noise, points.shape)


def test_smoothing_keeps_the_tolerance_and_takes_the_noise_off(read):
    """60 points of a circle, measured to 0.03 mm: what is between them is nearer to the circle than they are."""
    rough = read(table(circle(60, 0.03))).steps[1].curve
    smooth = read(table(circle(60, 0.03)), "rpy = [180", 'tolerance = "0.1 mm"\nrpy = [180').steps[1].curve
    assert 0.05e-3 < smooth.deviation <= 0.1e-3
    assert re.search(r"is at most 0\.0\d+ mm off its 60 points \(row \d+, tolerance 0\.1 mm\)", smooth.note)
    off, bend = [], []
    for curve in (rough, smooth):
        s = np.linspace(0, curve.breaks[-1], 2000)
        position, _ = evaluate(curve, s)
        off.append(np.abs(np.hypot(*position.T[:2]) - 0.08).max())
        bend.append(np.abs(PPoly(curve.position, curve.breaks)(s, 3)).max())
    assert off[1] < 0.8 * off[0]
    assert bend[1] < 0.05 * bend[0]


@pytest.mark.parametrize("tolerance", [0.02, 0.2, 2.0])
def test_deviation_is_what_it_says(read, tolerance):
    points = circle(40, 0.05, seed=3)
    curve = read(table(points), "rpy = [180", f"tolerance = {tolerance}\nrpy = [180").steps[1].curve
    s = np.linspace(0, curve.breaks[-1], 40001)
    position, _ = evaluate(curve, s)
    nearest = np.linalg.norm(position[:, None] - points / 1e3, axis=2).min(axis=0)
    assert curve.deviation <= tolerance * 1e-3 * (1 + 1e-9)
    assert nearest.max() <= curve.deviation + 2e-6  # as fine as the samples lie
    assert nearest[[0, -1]].max() < 1e-12  # it begins and ends where the points do


def test_tangents(read):
    """x of the tool along the circle, z down, whatever the smoothing leaves: against the derivative by differences."""
    new = 'orientation = "tangent"\ntolerance = 0.05'
    curve = read(table(circle(60, 0.01)), "rpy = [180, 0, 0]", new).steps[1].curve
    s = np.linspace(1e-4, curve.breaks[-1] - 1e-4, 500)
    h = 1e-6
    ahead, behind = evaluate(curve, s + h)[0], evaluate(curve, s - h)[0]
    tangent = (ahead - behind) / np.linalg.norm(ahead - behind, axis=1, keepdims=True)
    _, rotation = evaluate(curve, s)
    flat = tangent * [1, 1, 0]
    np.testing.assert_allclose(rotation[:, :, 0], flat / np.linalg.norm(flat, axis=1, keepdims=True), atol=2e-4)
    np.testing.assert_allclose(rotation[:, :, 2], np.tile([0, 0, -1.0], (len(s), 1)), atol=1e-12)


def test_the_normal_is_given_in_the_frame(read):
    a = np.linspace(0, np.pi / 2, 20)
    points = 60 * np.stack([np.sin(a), 0 * a, np.cos(a)], axis=1)
    new = 'orientation = "tangent"\nnormal = [0, -3, 0]'
    curve = read(table(points), "rpy = [180, 0, 0]", new).steps[1].curve
    _, rotation = evaluate(curve, np.array([0.0, curve.breaks[-1]]))
    np.testing.assert_allclose(rotation[0], [[1, 0, 0], [0, 0, 1], [0, -1, 0]], atol=1e-3)
    np.testing.assert_allclose(rotation[1], [[0, -1, 0], [0, 0, 1], [-1, 0, 0]], atol=1e-3)


def with_orientations(columns, values):
    x = np.linspace(0, 60, len(values))
    rows = [",".join(map(repr, [float(a), 0.0, 0.0, *map(float, row)])) for a, row in zip(x, values, strict=True)]
    return "\n".join([f"x,y,z,{columns}", *rows]) + "\n"


ANGLES = [[180 - 4 * k, 3 * k, 20 * k] for k in range(12)]


def test_orientations_from_angles_and_from_quaternions(read):
    turned = Rotation.from_euler("xyz", ANGLES, degrees=True)
    one = read(with_orientations("roll,pitch,yaw", ANGLES), "rpy = [180, 0, 0]\n", "").steps[1].curve
    either = turned.as_quat(scalar_first=True) * np.where(np.arange(12) % 2, 1, -1)[:, None]
    other = read(with_orientations("qw,qx,qy,qz", either), "rpy = [180, 0, 0]\n", "").steps[1].curve
    s = np.linspace(0, one.breaks[-1], 300)
    np.testing.assert_allclose(evaluate(one, s)[1], evaluate(other, s)[1], atol=1e-9)
    unit = steady_quaternions(turned.as_matrix())
    u = np.cumsum(np.append(0.0, np.hypot(0.06 / 11 / 0.49, angles_between(unit[:-1], unit[1:]))))
    assert u[-1] == pytest.approx(one.breaks[-1], rel=0.02)  # about evenly by arm lengths and rad
    assert "orientations" not in one.note


def test_orientations_are_smoothed_within_their_own_tolerance(read):
    noisy = np.array(ANGLES) + np.random.default_rng(1).normal(0, 0.1, (12, 3))
    new = 'angle_tolerance = "0.3 deg"\n'
    curve = read(with_orientations("roll,pitch,yaw", noisy), "rpy = [180, 0, 0]\n", new).steps[1].curve
    assert 0.1 < np.rad2deg(curve.turned) <= 0.3
    assert curve.deviation < 1e-12
    assert "its orientations are at most" in curve.note


def test_an_offset_moves_every_pose(read):
    plain = read(with_orientations("roll,pitch,yaw", ANGLES), "rpy = [180, 0, 0]\n", "").steps[1].curve
    new = "offset = { frame = [1, 2, 3], tool = [0, 5, -20], rpy = [0, 15, 0] }\n"
    moved = read(with_orientations("roll,pitch,yaw", ANGLES), "rpy = [180, 0, 0]\n", new).steps[1].curve
    s = np.linspace(0, plain.breaks[-1], 200)
    position, rotation = evaluate(plain, s)
    there, turned = evaluate(moved, s)
    np.testing.assert_allclose(turned, rotation @ Rotation.from_euler("y", 15, degrees=True).as_matrix(), atol=1e-12)
    expected = position + [1e-3, 2e-3, 3e-3] + rotation @ [0, 5e-3, -20e-3]
    np.testing.assert_allclose(there, expected, atol=2e-8)


def test_points_that_repeat_are_left_out_and_said(read):
    doubled = XYZ.replace("20,0,1\n", "20,0,1\n20,0,1\n20,0,1\n")
    one, other = read(XYZ).steps[1].curve, read(doubled).steps[1].curve
    np.testing.assert_array_equal(one.position, other.position)
    assert other.note.endswith("; 2 points that repeat the one before left out")


def test_units_remarks_and_empty_lines(read):
    csv = "\ufeff# measured\n\n z_m , x_mm,y_m\r\n0.001,0,0\n# half way\n 0 , 1e1 ,+.001\n\n0,20,-0\n"
    curve = read(csv).steps[1].curve
    position, _ = evaluate(curve, np.array([0.0, curve.breaks[-1]]))
    np.testing.assert_allclose(position, [[0, 0, 0.001], [0.02, 0, 0]], atol=1e-15)


BAD = {
    "empty": ("", "rim.csv: there are no columns and no rows in it"),
    "no rows": ("x,y,z\n", "rim.csv: expected at least 2 rows of numbers, got 0"),
    "one row": ("x,y,z\n1,2,3\n", "rim.csv: expected at least 2 rows of numbers, got 1"),
    "missing column": ("x,y\n1,2\n3,4\n", 'rim.csv: column "z": missing, there is x, y'),
    "unknown column": (
        "x,y,z,speed\n1,2,3,4\n2,3,4,5\n",
        'rim.csv: column "speed": unknown, expected x, y, z, roll, pitch, yaw, qw, qx, qy, qz',
    ),
    "misspelt column": ("x,y,z,jaw\n1,2,3,4\n2,3,4,5\n", 'rim.csv: column "jaw": unknown, did you mean "yaw"?'),
    "unit": (
        "x_in,y,z\n1,2,3\n2,3,4\n",
        'rim.csv: column "x_in": unknown, expected x, y, z, roll, pitch, yaw, qw, qx, qy, qz',
    ),
    "column twice": ("x,y,z,x_mm\n1,2,3,4\n2,3,4,5\n", 'rim.csv: column "x_mm": is there twice'),
    "no names": (
        "1,2,3\n2,3,4\n",
        "rim.csv: expected column names (x, y, z) in the first line, got numbers",
    ),
    "no number": (
        XYZ.replace("30,-1,0", "30,-1,high"),
        'rim.csv: row 4 (line 5), column z: expected a number, got "high"',
    ),
    "NaN": (XYZ.replace("10,1,0", "nan,1,0"), 'rim.csv: row 2 (line 3), column x: expected a number, got "nan"'),
    "infinite": (XYZ.replace("10,1,0", "10,inf,0"), 'rim.csv: row 2 (line 3), column y: expected a number, got "inf"'),
    "empty cell": (XYZ.replace("10,1,0", "10,,0"), 'rim.csv: row 2 (line 3), column y: expected a number, got ""'),
    "short row": (XYZ.replace("10,1,0", "10,1"), "rim.csv: row 2 (line 3): expected 3 numbers, got 2"),
    "long row": (XYZ.replace("10,1,0", "10,1,0,0"), "rim.csv: row 2 (line 3): expected 3 numbers, got 4"),
    "far away": (
        XYZ.replace("10,1,0", "10,2e6,0"),
        "rim.csv: row 2 (line 3), column y: expected at most 1000 m or rad, got 2e6",
    ),
    "huge": (
        XYZ.replace("10,1,0", "10,1e999,0"),
        "rim.csv: row 2 (line 3), column y: expected at most 1000 m or rad, got 1e999",
    ),
    "semicolons": (
        XYZ.replace(",", ";"),
        'rim.csv: column "x;y;z": unknown, expected x, y, z, roll, pitch, yaw, qw, qx, qy, qz',
    ),
    "all the same": ("x,y,z\n1,2,3\n1,2,3\n", "rim.csv: all its points are the same, expected a path"),
    "part of an orientation": (
        "x,y,z,roll,yaw\n1,2,3,0,0\n2,3,4,0,0\n",
        'rim.csv: column "pitch": missing, there is x, y, z, roll, yaw',
    ),
    "two orientations": (
        "x,y,z,roll,qw\n1,2,3,0,0\n2,3,4,0,0\n",
        "rim.csv: has roll, pitch, yaw and a quaternion, expected one of the two",
    ),
    "orientation twice": (
        "x,y,z,roll,pitch,yaw\n1,2,3,180,0,0\n2,3,4,180,0,0\n",
        "pick.toml: curves.rim.rpy: rim.csv has orientations of its own, expected none here",
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_the_exact_line_about_a_file(read, case):
    csv, line = BAD[case]
    assert complaint(read, csv) == line


def test_quaternions_of_another_length_and_wide_turns(read):
    unit = "x,y,z,qw,qx,qy,qz\n0,0,0,0,1,0,0\n10,0,0,0,1,0.1,0\n"
    line = "rim.csv: row 2 (line 3): expected a quaternion qw, qx, qy, qz of length 1, got length 1.00499"
    assert complaint(read, unit, "rpy = [180, 0, 0]\n", "") == line
    wide = "x,y,z,roll,pitch,yaw\n0,0,0,180,0,0\n10,0,0,180,0,160\n"
    line = "rim.csv: row 1 (line 2) to row 2 (line 3): the tool turns by 160 deg, expected at most 150 deg"
    assert complaint(read, wide, "rpy = [180, 0, 0]\n", "") == line


def test_too_many_rows(read):
    csv = "x,y,z\n" + "".join(f"{k},0,0\n" for k in range(MOST_POINTS + 1))
    assert complaint(read, csv) == f"rim.csv: expected at most {MOST_POINTS} rows of numbers, got {MOST_POINTS + 1}"


def test_files_that_are_none(read, tmp_path):
    line = 'pick.toml: curves.rim.points: no such file "rom.csv"'
    assert complaint(read, XYZ, '"rim.csv"', '"rom.csv"') == line
    (tmp_path / "folder.csv").mkdir()
    assert complaint(read, XYZ, '"rim.csv"', '"folder.csv"') == "folder.csv: is no regular file, expected a CSV file"
    (tmp_path / "raw.csv").write_bytes(b"x,y,z\n\xff\n")
    assert complaint(read, XYZ, '"rim.csv"', '"raw.csv"') == "raw.csv: line 2: not UTF-8 text, expected a CSV file"
    (tmp_path / "large.csv").write_bytes(b" " * 20_000_001)
    assert (
        complaint(read, XYZ, '"rim.csv"', '"large.csv"') == "large.csv: larger than 20 MB, expected a CSV file of less"
    )


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        (
            "rpy = [180, 0, 0]\n",
            "",
            'curves.rim: rim.csv has no orientations, expected orientation = "tangent", rpy or quat',
        ),
        (
            "rpy = [180",
            'orientation = "tangent"\nrpy = [180',
            "curves.rim.orientation: given together with rpy or quat, expected one of them",
        ),
        (
            "rpy = [180",
            'orientation = "tangents"\nrpy = [180',
            'curves.rim.orientation: expected "tangent", got "tangents", did you mean "tangent"?',
        ),
        (
            "rpy = [180",
            "normal = [0, 0, 1]\nrpy = [180",
            'curves.rim.normal: goes with orientation = "tangent", which is missing',
        ),
        (
            "rpy = [180, 0, 0]",
            'orientation = "tangent"\nnormal = [0, 0, 0]',
            "curves.rim.normal: expected a direction, got [0, 0, 0]",
        ),
        (
            "rpy = [180",
            "tolerance = -1\nrpy = [180",
            "curves.rim.tolerance: expected a tolerance from 0.0001 mm to 100 mm, got -1",
        ),
        (
            "rpy = [180",
            'tolerance = "1 m"\nrpy = [180',
            'curves.rim.tolerance: expected a tolerance from 0.0001 mm to 100 mm, got "1 m"',
        ),
        (
            "rpy = [180",
            'tolerance = "1 deg"\nrpy = [180',
            'curves.rim.tolerance: expected a length such as "20 mm", got "1 deg"',
        ),
        (
            "rpy = [180",
            "angle_tolerance = 1\nrpy = [180",
            "curves.rim.angle_tolerance: rim.csv has no orientations to smooth",
        ),
        (
            "rpy = [180",
            "offset = {}\nrpy = [180",
            'curves.rim.offset: expected "frame", "tool" or "rpy", got an empty table',
        ),
        ("rpy = [180", "tolerence = 1\nrpy = [180", 'curves.rim.tolerence: unknown key, did you mean "tolerance"?'),
        ('frame = "part"', 'frame = "prat"', 'curves.rim.frame: no frame "prat" in [frames], did you mean "part"?'),
        ("[curves.rim]", "[curves.home]", "curves.home: a position of the arm has that name, expected another name"),
        ("rim.start", "rim.strat", 'step[1].to: no pose "rim.strat" in [poses], did you mean "rim.start"?'),
        ('along = "rim"', 'along = "rum"', 'step[2].along: no path "rum" in [curves], did you mean "rim"?'),
        ('points = "rim.csv"\n', "", 'curves.rim: missing key "points"'),
    ],
)
def test_the_exact_line_about_a_curve(read, old, new, line):
    assert complaint(read, XYZ, old, new) == f"pick.toml: {line}"


def test_a_path_that_turns_back_on_itself_has_no_tangents(read):
    csv = table([[k, 0, 0] for k in range(6)] + [[4 - k, 0, 0] for k in range(5)])
    line = complaint(read, csv, "rpy = [180, 0, 0]", 'orientation = "tangent"')
    assert line == "pick.toml: curves.rim: the path turns back on itself at point 6"


def test_a_path_along_its_normal_has_no_tangents(read):
    new = 'orientation = "tangent"\nnormal = [1, 0, 0]'
    line = complaint(read, table([[k, 0, 0] for k in range(6)]), "rpy = [180, 0, 0]", new)
    rest = "the path runs along it at point 1, so the tangent gives no orientation"
    assert line == f"pick.toml: curves.rim.normal: {rest}"


# Taught paths


def test_taught_points(read):
    task = read(JOINTS, text=TAUGHT)
    expected = np.deg2rad([[float(v) for v in line.split(",")] for line in JOINTS.splitlines()[1:]])
    taught = task.steps[1].taught
    np.testing.assert_allclose(taught.points, expected, atol=1e-15)
    assert (taught.name, taught.tolerance, taught.note) == ("hop", 0.0, "")
    assert task.steps[0].target.joints == pytest.approx(expected[0])
    assert task.steps[1].target.joints == pytest.approx(expected[-1])
    assert task.sources["hop.csv"] == hashlib.sha256(JOINTS.encode()).hexdigest()


def test_taught_columns_in_any_order_and_unit(read):
    csv = "flange_rad,turn_deg,lift,bend,roll,tip\n0.1,0,-30,60,0,60\n0.1,0,-30,60,0,60\n0.2,10,-30,60,0,60\n"
    taught = read(csv, text=TAUGHT).steps[1].taught
    np.testing.assert_allclose(taught.points[:, [5, 0]], [[0.1, 0], [0.2, np.deg2rad(10)]])
    assert taught.note == 'taught path "hop": 1 point that repeats the one before left out'


@pytest.mark.parametrize(
    ("text", "value"), [('"0.5 deg"', np.deg2rad(0.5)), ("0.5", np.deg2rad(0.5)), ('"1 mm"', None), ('"5 mrad"', 5e-3)]
)
def test_taught_tolerance(read, bench6, text, value):
    task = read(JOINTS, "points", f"tolerance = {text}\npoints", text=TAUGHT)
    assert task.steps[1].taught.tolerance == pytest.approx(1e-3 / bench6.length if value is None else value)


@pytest.mark.parametrize(
    ("csv", "line"),
    [
        (JOINTS.replace("tip", "tap"), 'hop.csv: column "tap": unknown, did you mean "tip"?'),
        (
            JOINTS.replace("5,-25", "175,-25"),
            "hop.csv: row 2 (line 3): joint turn at 175 deg, expected from -170 deg to 170 deg",
        ),
        (JOINTS.replace("5,-25", "five,-25"), 'hop.csv: row 2 (line 3), column turn: expected a number, got "five"'),
        (JOINTS.rpartition("5,-25")[0], "hop.csv: expected at least 2 rows of numbers, got 1"),
        (JOINTS.rpartition("5,-25")[0] * 2, 'hop.csv: row 2 (line 3), column turn: expected a number, got "turn"'),
    ],
)
def test_the_exact_line_about_taught_points(read, csv, line):
    assert complaint(read, csv, text=TAUGHT) == line


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        (
            "points",
            "tolerance = 0\npoints",
            "taught.hop.tolerance: expected a tolerance from 0.0000573 deg to 28.65 deg, got 0",
        ),
        (
            "points",
            'tolerance = "2 kg"\npoints',
            'taught.hop.tolerance: expected an angle such as "10 deg", got "2 kg"',
        ),
        ("points", "frame = 3\npoints", "taught.hop.frame: unknown key"),
        (
            'along = "hop"',
            'along = "hop"\nconfiguration = { elbow = "up" }',
            "step[2].configuration: the target is a joint vector, which leaves nothing to choose",
        ),
        (
            'along = "hop"',
            'along = "hop"\nvia = "hop.start"',
            'step[2].via: only an arc takes via, this motion is "taught"',
        ),
    ],
)
def test_the_exact_line_about_a_taught_path(read, old, new, line):
    found = complaint(read, JOINTS, old, new, text=TAUGHT)
    assert found.startswith(f"pick.toml: {line}")


# What they are made of


def test_quaternions_against_scipy():
    turned = Rotation.from_rotvec(np.linspace([3.0, 0, 0], [-3.0, 1.0, 2.0], 50))
    unit = steady_quaternions(turned.as_matrix())
    assert (np.einsum("ij,ij->i", unit[1:], unit[:-1]) > 0).all()
    np.testing.assert_allclose(rotations(7 * unit), turned.as_matrix(), atol=1e-14)
    angle = (turned[:-1].inv() * turned[1:]).magnitude()
    np.testing.assert_allclose(angles_between(unit[:-1], -unit[1:]), angle, atol=1e-12)
    product = quaternion_product(unit[:-1], unit[1:])
    np.testing.assert_allclose(rotations(product), (turned[:-1] * turned[1:]).as_matrix(), atol=1e-12)


def test_curve_through_needs_no_file():
    position = np.array([[0, 0, 0], [0.1, 0, 0], [0.2, 0.1, 0]])
    curve = curve_through(position, np.tile(np.eye(3), (3, 1, 1)), 0.5)
    assert curve.pose(end=True)[:3, 3] == pytest.approx(position[-1])
    assert curve.breaks[-1] == pytest.approx((0.1 + 0.1 * np.sqrt(2)) / 0.5)
    with pytest.raises(ValueError, match="read-only"):
        curve.position[0] = 0
