"""The access policy allows each node what it does on the graph, and no more.

Nodes are started with the settings that open most topics, and what they really make is listed by rclpy's graph: a new
topic, service or client fails here until the policy names it, and so does one that is gone.
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

from faults.conftest import Tell
from rclpy.context import Context
from ros_probe import NodeProcess, Probe

from fieldnav_ros.nodes.pit.link import PitLink
from fieldnav_ros.resources import config_path

pytestmark = pytest.mark.ros
POLICY = config_path("policies/fieldnav.policy.xml")
Rights = dict[str, set[str]]
KINDS = {"publish": "publisher", "subscribe": "subscriber", "reply": "service", "request": "client"}
WATCH = "fieldnav_watch"
# Each node with its settings, once or more often: the policy allows what any of them does. All run in a namespace, so
# that a name which is not relative is seen; ``{}`` is a folder of the test's.
TABLE: dict[str, list[list[str]]] = {
    "guidance_node": [[]],
    "judge_node": [[]],
    "simulator_node": [[]],
    "recorder_node": [["bags:={}/bags"]],
    "tuner_node": [
        ["ledger:={}/a", "champion_file:={}/a.yaml", "return:=drive"],
        ["ledger:={}/b", "champion_file:={}/b.yaml", "mode:=observe"],
    ],
}


def fqn(name: str, namespace: str, node: str) -> str:
    """Return a name of the policy in full, as SROS2 does: absolute, private to the node, or relative."""
    if name.startswith("/"):
        return name
    home = namespace.rstrip("/")
    return f"{home}/{node}{name[1:]}" if name.startswith("~") else f"{home}/{name}"


def allowed() -> dict[str, Rights]:
    """Return what the policy allows each node, by full names in the namespace of its profile."""
    found: dict[str, Rights] = {}
    for profile in ElementTree.parse(POLICY).getroot().iter("profile"):
        namespace, node = profile.attrib["ns"], profile.attrib["node"]
        rights = found.setdefault(node, {kind: set() for kind in KINDS})
        for block in profile:
            for kind, word in block.attrib.items():
                assert word == "ALLOW", "what is not allowed is denied anyway"
                rights[kind] |= {fqn(str(item.text), namespace, node) for item in block}
    return found


ALLOWED = allowed()


def seen(probe: Probe, node: str, namespace: str) -> Rights:
    """Return what a node makes on the graph, its namespace taken off."""
    rights: Rights = {}
    for kind, word in KINDS.items():
        ask = getattr(probe.node, f"get_{word}_names_and_types_by_node")
        rights[kind] = {name.removeprefix(namespace) for name, _ in ask(node, namespace)}
    return rights


def settled(probe: Probe, node: str, namespace: str) -> Rights:
    """Return what a node makes once all the names of the policy are there, or half a minute has passed.

    A second more is for names that the policy does not know.
    """

    def there() -> bool:
        return (node, namespace) in probe.node.get_node_names_and_namespaces()

    probe.until(there)
    least = {kind: names - {"/pose", "/goal"} for kind, names in ALLOWED[node].items()}
    end = probe.now() + 30 * 10**9
    probe.until(lambda: probe.now() > end or all(least[kind] <= seen(probe, node, namespace)[kind] for kind in KINDS))
    end = probe.now() + 10**9
    probe.until(lambda: probe.now() > end)
    return seen(probe, node, namespace)


@pytest.fixture(scope="module")
def graph(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, Rights]]:
    """What each node of the table makes, all its settings together."""
    folder = tmp_path_factory.mktemp("policy")
    made: dict[str, Rights] = {}
    with ExitStack() as stack, Probe() as probe:
        places = []
        for node, rows in TABLE.items():
            for number, row in enumerate(rows):
                namespace = f"/yard_{number}"
                words = [word.format(folder) for word in row]
                stack.enter_context(NodeProcess(node, words, namespace=namespace))
                places.append((node, namespace))
        link = PitLink(Context(), "tuner_node", "/yard_0")
        stack.callback(link.close)
        for node, namespace in [*places, (WATCH, "/yard_0")]:
            rights = settled(probe, node, namespace)
            for kind, names in rights.items():
                made.setdefault(node, {kind: set() for kind in KINDS})[kind] |= names
        yield made


@pytest.mark.parametrize("node", [*TABLE, WATCH])
def test_a_node_is_allowed_exactly_what_it_does(graph: dict[str, Rights], tell: Tell, node: str) -> None:
    assert graph[node] == ALLOWED[node]
    names = sum(len(names) for names in graph[node].values())
    tell(f"policy: {node}", names, "every topic, service and client allowed, and no other")


def test_every_node_there_is_has_a_profile_and_an_enclave_of_its_own(root: Path) -> None:
    modules = {path.stem for path in (root / "fieldnav_ros" / "nodes").glob("*_node.py")}
    assert modules == set(TABLE), "a new node goes into the table and the policy"
    enclaves = [enclave.attrib["path"] for enclave in ElementTree.parse(POLICY).getroot().iter("enclave")]
    assert sorted(enclaves) == sorted(f"/fieldnav/{node}" for node in [*TABLE, WATCH])


def test_one_node_may_drive_and_one_may_set_its_numbers() -> None:
    """Least privilege where it counts most."""

    def who(kind: str, name: str) -> set[str]:
        return {node for node, rights in ALLOWED.items() if name in rights[kind]}

    assert who("publish", "/cmd_vel") == {"guidance_node"}
    assert who("request", "/guidance_node/set_parameters_atomically") == {"tuner_node"}
    assert who("request", "/guidance_node/set_parameters") == set()
    assert who("request", "/tuner_node/release") == {WATCH}
    assert who("publish", "/episode/request") == {"tuner_node"}
    assert who("publish", "/hold") == set(), "the operator's own"


def test_the_policy_has_the_form_that_sros2_reads() -> None:
    """Elements and attributes as in the schema policy.xsd of sros2 (version 0.2.0), here by hand."""
    inner = {
        "policy": {"enclaves"}, "enclaves": {"enclave"}, "enclave": {"profiles"}, "profiles": {"profile"},
        "profile": {"topics", "services"}, "topics": {"topic"}, "services": {"service"},
        "topic": set(), "service": set(),
    }  # fmt: skip
    attributes = {
        "policy": {"version"}, "enclave": {"path"}, "profile": {"ns", "node"}, "topics": {"publish", "subscribe"},
        "services": {"reply", "request"},
    }  # fmt: skip
    top = ElementTree.parse(POLICY).getroot()
    assert (top.tag, top.attrib) == ("policy", {"version": "0.2.0"})
    for element in top.iter():
        assert {child.tag for child in element} <= inner[element.tag]
        assert set(element.attrib) <= attributes.get(element.tag, set())
        assert len(element) or element.tag in ("topic", "service")
