"""What the node may touch: its SROS 2 policy, its files, the size of what it reads.

The policy of the example team is written anew by ``python3 tests/test_security.py``; for
another team run the node and ``ros2 security generate_policy`` beside it.
"""

from __future__ import annotations

import ast
import stat
import sys
import xml.etree.ElementTree as xml
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
sys.path[:0] = [str(ROOT)]

POLICY = ROOT / "config" / "allocator.policy.xml"
TEAM = ROOT / "config" / "solar_farm.yaml"

Grants = dict[tuple[str, str], set[str]]
"""(what, how) to full names, such as ("topic", "publish") to {"/rosout"}."""

KINDS = {"topic": ("publish", "subscribe"), "service": ("reply", "request")}

OUTSIDE = {"/clock"}
"""Touched only with ``use_sim_time``, for which a policy is of no use."""


def granted(path: Path) -> Grants:
    """Read a policy (ROS 2 design article "ROS 2 Access Control Policies")."""
    root = xml.parse(path).getroot()
    assert root.tag == "policy"
    profiles = root.findall("./enclaves/enclave/profiles/profile")
    assert [(p.get("ns"), p.get("node")) for p in profiles] == [("/", "allocator")]
    grants: Grants = {(what, how): set() for what, hows in KINDS.items() for how in hows}
    for group in profiles[0]:
        what = group.tag.removesuffix("s")
        for how, verdict in group.attrib.items():
            assert verdict == "ALLOW"
            names = [entry.text.strip() for entry in group]
            assert not [n for n in names if set("*?[") & set(n)], "no wildcards: they grant more"
            grants[what, how] |= {_full(name) for name in names}
    return grants


def _full(name: str) -> str:
    return name.replace("~", "/allocator", 1) if name[0] == "~" else "/" + name.lstrip("/")


@contextmanager
def started() -> Iterator[object]:
    """Give the node, active on the example team."""
    import rclpy
    from rclpy.parameter import Parameter

    from allocator_node.ros.allocator_node import AllocatorNode
    from allocator_node.ros.allocator_node import started as starts

    rclpy.init()
    node = AllocatorNode(parameter_overrides=[Parameter("team_file", value=str(TEAM))])
    try:
        assert starts(node)
        yield node
    finally:
        node.destroy_node()
        rclpy.shutdown()


def touched(node) -> Grants:  # noqa: ANN001
    """Give all that a node publishes, hears, serves and asks."""
    me = ("allocator", "/")
    return {
        key: {name for name, _ in ask(*me)} - OUTSIDE
        for key, ask in {
            ("topic", "publish"): node.get_publisher_names_and_types_by_node,
            ("topic", "subscribe"): node.get_subscriber_names_and_types_by_node,
            ("service", "reply"): node.get_service_names_and_types_by_node,
            ("service", "request"): node.get_client_names_and_types_by_node,
        }.items()
    }


def written(grants: Grants) -> str:
    """Give the text of a policy."""
    lines = [
        '<?xml version="1.0" encoding="UTF-8"?>',
        "<!-- What the allocator of config/solar_farm.yaml touches, and nothing more. -->",
        '<policy version="0.2.0">',
        "  <enclaves>",
        '    <enclave path="/allocator">',
        "      <profiles>",
        '        <profile ns="/" node="allocator">',
    ]
    for (what, how), names in grants.items():
        if names:
            lines.append(f'          <{what}s {how}="ALLOW">')
            short = (name.replace("/allocator/", "~/", 1) for name in sorted(names))
            lines += [f"            <{what}>{name.lstrip('/')}</{what}>" for name in short]
            lines.append(f"          </{what}s>")
    lines += [
        "        </profile>", "      </profiles>", "    </enclave>", "  </enclaves>", "</policy>"
    ]
    return "\n".join(lines) + "\n"


@pytest.mark.ros
def test_the_policy_grants_what_the_node_touches_and_nothing_more() -> None:
    """Services that a distribution's rclpy adds to every node may be missing here."""
    pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")
    grants = granted(POLICY)
    with started() as node:
        touches = touched(node)
    for key, names in touches.items():
        assert grants[key] == names, key


def test_a_state_file_that_is_a_link_is_not_followed_elsewhere(tmp_path: Path) -> None:
    """The link is replaced, not what it points to; the new file is not for others to write."""
    from allocator_node.ros.state_file import StateFile

    secret = tmp_path / "secret"
    secret.write_text("keep me")
    path = tmp_path / "state.json"
    path.symlink_to(secret)
    (tmp_path / "state.json.new").symlink_to(secret)
    keeper = StateFile(path)
    keeper.save({"efficacy": []})
    keeper.close()
    assert secret.read_text() == "keep me"
    assert not path.is_symlink()
    assert not path.stat().st_mode & (stat.S_IWGRP | stat.S_IWOTH)
    assert [p.name for p in tmp_path.iterdir() if p.suffix == ".new"] == []


def test_no_file_is_loaded_by_anything_that_runs_code() -> None:
    """Neither pickles, nor YAML with tags, nor eval: not in any module of the package."""
    forbidden = {"eval", "exec", "compile", "__import__"}
    for path in (ROOT / "allocator_node").rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Import | ast.ImportFrom):
                names = {alias.name for alias in node.names} | {getattr(node, "module", "")}
                assert not names & {"pickle", "marshal", "shelve", "dill"}, path
            if not isinstance(node, ast.Call):
                continue
            called = node.func
            if isinstance(called, ast.Name):
                assert called.id not in forbidden, path
            if isinstance(called, ast.Attribute) and getattr(called.value, "id", "") == "yaml":
                assert called.attr in {"safe_load", "parse", "safe_dump"}, path
            if isinstance(called, ast.Attribute) and getattr(called.value, "id", "") == "np":
                assert called.attr != "load", path


if __name__ == "__main__":
    with started() as running:
        POLICY.write_text(written(touched(running)), encoding="utf-8")
