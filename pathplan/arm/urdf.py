"""URDF files: links and joints as they are written, and the chain between two links with what is fixed folded in.

Read by the standard XML library; a document type declaration, with which entities and outside files come, is refused.
Lengths in m, angles in rad, masses in kg. Meshes, colours, sensors and transmissions are not looked at. The defaults
are those of the URDF description: an origin that is left out is the identity, an axis (1, 0, 0).
"""

from __future__ import annotations

import hashlib
import math
import xml.etree.ElementTree as ET
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from pathplan.arm.bodies import Body, combined, moved
from pathplan.arm.model import Array, Kind, read_only
from pathplan.errors import InputError
from pathplan.tomlfile import FARTHEST, MAX_BYTES, nearest, rotation_from_rpy

__all__ = ["MovingJoint", "Urdf", "UrdfChain", "read_urdf"]

MOVING: Mapping[str, Kind] = {"revolute": "revolute", "continuous": "revolute", "prismatic": "prismatic"}
TYPES = (*MOVING, "fixed", "planar", "floating")
SHOWN = 8  # names listed in a message


@dataclass(frozen=True)
class UrdfJoint:
    """One <joint> as written; limits None where not given."""

    name: str
    type: str
    parent: str
    child: str
    origin: Array  # (4, 4) parent link to joint
    axis: Array  # (3,) unit
    lower: float | None
    upper: float | None
    velocity: float | None
    effort: float | None
    damping: float
    friction: float
    mimic: str | None  # the joint that it follows


@dataclass(frozen=True)
class MovingJoint:
    """One joint of a chain: fixed joints before it are part of its transform, what is fixed to its link of its body."""

    joint: UrdfJoint
    kind: Kind
    parent_from_joint: Array  # (4, 4) from the joint before, or the base link
    body: Body  # in the joint's own moving frame

    @property
    def name(self) -> str:
        return self.joint.name

    @property
    def position(self) -> tuple[float, float] | None:
        """Limits; infinite for a joint without end, None where none are given or both are the same."""
        lower, upper = self.joint.lower, self.joint.upper
        if self.joint.type == "continuous":
            return (-np.inf, np.inf)
        if lower is None or upper is None or not lower < upper:
            return None
        return (lower, upper)


@dataclass(frozen=True)
class UrdfChain:
    """The moving joints from a base link to a tip link."""

    base: str
    tip: str
    joints: tuple[MovingJoint, ...]
    tip_from_flange: Array  # (4, 4) from the last joint's moving frame to the tip link
    held: tuple[str, ...]  # moving joints beside the chain, taken as fixed at zero: their bodies are carried along


@dataclass(frozen=True)
class Urdf:
    """A robot description. `links` are the bodies of the links, None for one without <inertial>."""

    name: str
    file: str
    digest: str  # sha256
    links: Mapping[str, Body | None]
    joints: Mapping[str, UrdfJoint]
    children: Mapping[str, tuple[UrdfJoint, ...]] = field(default_factory=dict)  # by parent link

    def error(self, where: str, complaint: str) -> InputError:
        return InputError.at(self.file, *([where] if where else []), complaint)

    def roots(self) -> list[str]:
        """Links that no joint carries."""
        carried = {joint.child for joint in self.joints.values()}
        return [link for link in self.links if link not in carried]

    def chain(self, base: str | None = None, tip: str | None = None) -> UrdfChain:
        """The chain from a base link (default: the root) to a tip link (default: the end of the longest chain).

        Raises InputError for links that don't exist or aren't on one chain, several tips as far, and joints on the
        chain that can't be planned for: floating, planar and mimic joints.
        """
        base = self._link(base, "base_link") if base is not None else self._root()
        tip = self._link(tip, "tip_link") if tip is not None else self._farthest(base)
        by_child = {joint.child: joint for joint in self.joints.values()}
        path: list[UrdfJoint] = []
        link = tip
        while link != base:
            if link not in by_child:
                above = f'link "{tip}" does not hang on link "{base}" but on "{link}"'
                raise self.error("tip_link", f"{above}, expected one of {self._listed(self._below(base))}")
            path.insert(0, by_child[link])
            link = path[0].parent
        for joint in path:
            self._check_type(joint)
        return self._folded(base, tip, path)

    def _folded(self, base: str, tip: str, path: list[UrdfJoint]) -> UrdfChain:
        moving: list[MovingJoint] = []
        on_path = {joint.name for joint in path}
        held: list[str] = []
        step = np.eye(4)
        for joint in path:
            step = step @ joint.origin
            if joint.type in MOVING:
                body = self._carried(joint.child, on_path, held)
                moving.append(MovingJoint(joint, MOVING[joint.type], read_only(step), body))
                step = np.eye(4)
        if not moving:
            raise self.error("", f'no joint moves between link "{base}" and link "{tip}", expected at least one')
        return UrdfChain(base, tip, tuple(moving), read_only(step), tuple(held))

    def _carried(self, link: str, on_path: set[str], held: list[str]) -> Body:
        """The body of a link with everything that hangs on it, but what the chain's own next joint moves."""
        bodies = [(np.eye(4), self.links[link])]
        open_links = [(np.eye(4), link)]
        while open_links:
            pose, name = open_links.pop()
            for joint in self.children.get(name, ()):
                if joint.type != "fixed" and joint.name in on_path:
                    continue
                if joint.type != "fixed":
                    held.append(joint.name)
                there = pose @ joint.origin
                bodies.append((there, self.links[joint.child]))
                open_links.append((there, joint.child))
        return combined([moved(body, pose) for pose, body in bodies if body is not None])

    def _check_type(self, joint: UrdfJoint) -> None:
        where = f'joint "{joint.name}"'
        if joint.type in ("planar", "floating"):
            raise self.error(
                where,
                f"is {joint.type}, which no single drive moves; expected revolute, continuous, prismatic or fixed "
                "joints between base and tip: choose base_link or tip_link so that it is not among them",
            )
        if joint.mimic is not None:
            raise self.error(
                where,
                f'follows joint "{joint.mimic}" (mimic): it has no drive of its own to plan for; choose a tip_link '
                'before it, or make it type="fixed"',
            )

    def _root(self) -> str:
        roots = self.roots()
        if len(roots) > 1:
            raise self.error(
                "", f"several links hang on nothing: {self._listed(roots)}; expected base_link to say which"
            )
        return roots[0]

    def _farthest(self, base: str) -> str:
        """The end of the chain with most moving joints, and beyond along fixed joints that don't branch."""
        count = {base: 0}
        order = [base]
        for link in order:
            for joint in self.children.get(link, ()):
                moves = joint.type in MOVING and joint.mimic is None
                count[joint.child] = count[link] + moves
                order.append(joint.child)
        most = max(count.values())
        first = [link for link in order if count[link] == most]
        tops = [link for link in first if not any(link == j.child and j.parent in first for j in self.joints.values())]
        link = tops[0]
        while len(tops) == 1:
            after = [joint for joint in self.children.get(link, ()) if joint.type == "fixed"]
            if not after:
                return link
            if len(after) > 1:
                tops = [joint.child for joint in after]
                break
            link = after[0].child
        raise self.error(
            "", f"several tips are as far: {self._listed(tops)}; expected tip_link to say which carries the tool"
        )

    def _below(self, base: str) -> list[str]:
        found = [base]
        for link in found:
            found += [joint.child for joint in self.children.get(link, ())]
        return found[1:]

    def _link(self, name: str, key: str) -> str:
        if name not in self.links:
            hint = nearest(name, self.links) or f", there is {self._listed(list(self.links))}"
            raise self.error(key, f'no link "{name}"{hint}')
        return name

    @staticmethod
    def _listed(names: list[str]) -> str:
        quoted = [f'"{name}"' for name in names[:SHOWN]] + ["..."] * (len(names) > SHOWN)
        return ", ".join(quoted)


class _Builder(ET.TreeBuilder):
    """A tree builder that refuses document types: with them come entities, and files from elsewhere."""

    def doctype(self, name: str, pubid: str | None, system: str | None) -> None:
        raise _DocumentType


class _DocumentType(Exception):
    pass


def read_urdf(path: str | Path) -> Urdf:
    """Read a URDF file. Raises InputError: missing or unreadable file, broken XML, not a robot description, joints
    between links that don't exist, a link with two parents, a loop, numbers that aren't.
    """
    shown = str(path)
    try:
        with open(path, "rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise InputError.at(shown, "no such file, expected a URDF file") from None
    except IsADirectoryError:
        raise InputError.at(shown, "is a directory, expected a URDF file") from None
    except (OSError, ValueError) as error:
        raise InputError.at(shown, f"can't be read: {getattr(error, 'strerror', None) or error}") from None
    name = Path(path).name
    if len(raw) > MAX_BYTES:
        raise InputError.at(name, f"larger than {MAX_BYTES // 1_000_000} MB, expected a URDF file of less")
    try:
        root = ET.fromstring(raw, parser=ET.XMLParser(target=_Builder()))
    except _DocumentType:
        raise InputError.at(
            name, "has a document type declaration (<!DOCTYPE ...>), expected plain XML without"
        ) from None
    except ET.ParseError as error:
        line, column = error.position
        reason = str(error).split(":")[0]
        raise InputError.at(name, f"line {line}, column {column + 1}", f"broken XML: {reason}") from None
    except (ValueError, LookupError, RecursionError) as error:  # an encoding that there isn't
        raise InputError.at(name, f"can't be read as XML: {error}") from None
    return _Reader(name, hashlib.sha256(raw).hexdigest()).robot(root)


@dataclass(frozen=True)
class _Reader:
    file: str
    digest: str

    def error(self, where: str, complaint: str) -> InputError:
        return InputError.at(self.file, *([where] if where else []), complaint)

    def robot(self, root: ET.Element) -> Urdf:
        if any("${" in value or "$(" in value for element in root.iter() for value in element.attrib.values()) or any(
            str(element.tag).startswith("{") for element in root
        ):
            raise self.error("", "is a template with macros, expected the plain URDF file made from it")
        if root.tag != "robot":
            raise self.error("", f"expected <robot> at the top, got <{_shown(str(root.tag))}>: not a URDF file")
        links: dict[str, Body | None] = {}
        for element in root.findall("link"):
            name = self.name(element, "link")
            if name in links:
                raise self.error(f'link "{name}"', "there are two of that name")
            links[name] = self.inertial(element.find("inertial"), f'link "{name}"')
        joints: dict[str, UrdfJoint] = {}
        for element in root.findall("joint"):
            joint = self.joint(element, links)
            if joint.name in joints:
                raise self.error(f'joint "{joint.name}"', "there are two of that name")
            joints[joint.name] = joint
        if not links or not joints:
            raise self.error("", f"has no {'joint' if links else 'link'}, expected <link> and <joint> elements")
        children: dict[str, list[UrdfJoint]] = {}
        for joint in joints.values():
            children.setdefault(joint.parent, []).append(joint)
        grouped = {name: tuple(group) for name, group in children.items()}
        robot = Urdf(_shown(root.get("name") or ""), self.file, self.digest, links, joints, grouped)
        self.check_tree(robot)
        return robot

    def check_tree(self, robot: Urdf) -> None:
        parents: dict[str, str] = {}
        for joint in robot.joints.values():
            if joint.child in parents:
                two = f'"{parents[joint.child]}" and "{joint.name}"'
                raise self.error(
                    f'link "{joint.child}"',
                    f"is carried by two joints, {two}: a loop; expected a tree, cut it open at one",
                )
            parents[joint.child] = joint.name
        reached = set(robot.roots())
        order = list(reached)
        for link in order:
            for joint in robot.children.get(link, ()):
                reached.add(joint.child)
                order.append(joint.child)
        loop = [joint.name for joint in robot.joints.values() if joint.child not in reached]
        if loop:
            names = ", ".join(f'"{name}"' for name in loop[:SHOWN])
            raise self.error(
                "", f"a loop of joints without a base: {names}; expected a tree, cut it open at one of them"
            )

    def name(self, element: ET.Element, kind: str) -> str:
        name = element.get("name")
        if not name or not name.strip() or not name.isprintable():
            raise self.error("", f"a <{kind}> without a name, expected {kind} names on one line")
        return name

    def joint(self, element: ET.Element, links: Mapping[str, object]) -> UrdfJoint:
        name = self.name(element, "joint")
        where = f'joint "{name}"'
        kind = element.get("type") or ""
        if kind not in TYPES:
            known = ", ".join(TYPES[:-1])
            raise self.error(where, f'type "{_shown(kind)}" is unknown, expected {known} or {TYPES[-1]}')
        ends = []
        for end in ("parent", "child"):
            tag = element.find(end)
            link = None if tag is None else tag.get("link")
            if link is None:
                raise self.error(where, f"has no <{end} link=...>")
            if link not in links:
                raise self.error(where, f'its {end} link "{_shown(link)}" does not exist{nearest(link, links)}')
            ends.append(link)
        axis = self.numbers(element.find("axis"), "xyz", where, (1.0, 0.0, 0.0))
        size = float(np.linalg.norm(axis))
        if kind in MOVING and not 1e-6 < size < 1e6:
            raise self.error(where, "axis: expected a direction that is not zero")
        limit, dynamics, mimic = element.find("limit"), element.find("dynamics"), element.find("mimic")
        lower, upper = self.number(limit, "lower", where), self.number(limit, "upper", where)
        if limit is not None and kind in ("revolute", "prismatic"):
            lower, upper = lower or 0.0, upper or 0.0  # what the description says of a limit left out
            if lower > upper:
                raise self.error(where, f"limit: lower {lower:g} is above upper {upper:g}")
        friction = [self.number(dynamics, key, where) or 0.0 for key in ("damping", "friction")]
        if min(friction) < 0.0:
            raise self.error(where, "dynamics: expected damping and friction of zero or more")
        velocity, effort = self.number(limit, "velocity", where), self.number(limit, "effort", where)
        follows = None if mimic is None else _shown(mimic.get("joint") or "?")
        return UrdfJoint(
            name,
            kind,
            ends[0],
            ends[1],
            self.origin(element.find("origin"), where),
            read_only(axis / size) if kind in MOVING else read_only([0.0, 0.0, 1.0]),
            lower,
            upper,
            velocity,
            effort,
            friction[0],
            friction[1],
            follows,
        )

    def inertial(self, element: ET.Element | None, where: str) -> Body | None:
        """The body of a link in its own frame; its inertia is kept as it is written (see `pathplan.arm.plausible`)."""
        if element is None:
            return None
        mass_tag, tag = element.find("mass"), element.find("inertia")
        mass = self.number(mass_tag, "value", where) or 0.0
        if mass < 0.0:
            raise self.error(where, f"mass {mass:g} kg is below zero")
        keys = ("ixx", "iyy", "izz", "ixy", "ixz", "iyz")
        xx, yy, zz, xy, xz, yz = (self.number(tag, key, where) or 0.0 for key in keys)
        pose = self.origin(element.find("origin"), where)
        return moved(Body(mass, np.zeros(3), np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])), pose)

    def origin(self, element: ET.Element | None, where: str) -> Array:
        pose = np.eye(4)
        pose[:3, :3] = rotation_from_rpy(self.numbers(element, "rpy", where, (0.0, 0.0, 0.0)))
        pose[:3, 3] = self.numbers(element, "xyz", where, (0.0, 0.0, 0.0))
        if np.abs(pose[:3, 3]).max() > FARTHEST:
            raise self.error(where, f"origin: expected coordinates within {FARTHEST:g} m")
        # Sines of quarter turns written as rounded numbers stay what they are; only exact ones are made exact.
        pose[:3, :3][np.abs(pose[:3, :3]) < 1e-15] = 0.0
        return read_only(pose)

    def numbers(self, element: ET.Element | None, key: str, where: str, default: tuple[float, float, float]) -> Array:
        text = None if element is None else element.get(key)
        if element is None or text is None:
            return np.array(default)
        words = text.split()
        if len(words) != 3:
            raise self.error(where, f'{element.tag} {key}: expected three numbers, got "{_shown(text)}"')
        return np.array([self.parsed(word, f"{element.tag} {key}", where) for word in words])

    def number(self, element: ET.Element | None, key: str, where: str) -> float | None:
        text = None if element is None else element.get(key)
        return None if element is None or text is None else self.parsed(text, f"{element.tag} {key}", where)

    def parsed(self, text: str, key: str, where: str) -> float:
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not math.isfinite(value) or "_" in text:
            raise self.error(where, f'{key}: expected a number, got "{_shown(text)}"')
        return value


def _shown(text: str) -> str:
    """A text from the file in a message: on one line, not too long."""
    line = "".join(char if char.isprintable() else "?" for char in text)
    return line if len(line) <= 60 else line[:57] + "..."
