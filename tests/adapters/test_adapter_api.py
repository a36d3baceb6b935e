import io
import sys
from collections.abc import Iterator
from importlib import import_module
from importlib.metadata import EntryPoint
from pathlib import Path

import pytest

from canticle_adapters.json_datagram import JsonAdapter
from canticle_daemon.adapter_api import (
    API_VERSION,
    GROUP,
    Adapter,
    AdapterRecord,
    find_adapter,
    load_adapters,
)
from canticle_daemon.config import Config
from canticle_daemon.errors import AdapterLoadError
from canticle_daemon.frame import Frame
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.setup import gather


class Plain(Adapter):
    name = "plain"

    def decode(self, datagram: bytes) -> Frame | None:
        return None


class FromTomorrow(Plain):
    name = "tomorrow"
    api_version = API_VERSION + 1


def point(name: str, value: str) -> EntryPoint:
    return EntryPoint(name, value, GROUP)


@pytest.fixture
def here() -> Iterator[str]:
    """The name under which entry points may import this very module."""
    name = "adapters_of_this_test"
    sys.modules[name] = sys.modules[__name__]
    yield name
    del sys.modules[name]


def only(point: EntryPoint) -> AdapterRecord:
    (record,) = load_adapters([point])
    return record


def test_a_good_adapter_is_ready(here: str):
    record = only(point("plain", f"{here}:Plain"))
    assert (record.status, record.adapter, record.reason) == ("ready", Plain, "")
    assert find_adapter("plain", [record]) is Plain


@pytest.mark.parametrize(
    ("name", "value", "reason"),
    [
        ("plain", "no_such_module_at_all:Plain", "No module named 'no_such_module_at_all'"),
        ("plain", "{here}:NoSuchName", "NoSuchName"),
        ("plain", "{here}:point", "not a subclass"),
        ("other", "{here}:Plain", "its name is 'plain', not 'other'"),
        ("tomorrow", "{here}:FromTomorrow", f"contract {API_VERSION + 1}, not {API_VERSION}"),
    ],
)
def test_a_broken_one_becomes_a_record(here: str, name: str, value: str, reason: str):
    record = only(point(name, value.format(here=here)))
    assert (record.status, record.adapter) == ("broken", None)
    assert reason in record.reason
    with pytest.raises(AdapterLoadError, match="is broken"):
        find_adapter(name, [record])


def test_a_broken_one_does_not_stop_the_rest(here: str):
    records = load_adapters([point("bad", "nowhere:At"), point("plain", f"{here}:Plain")])
    assert [(r.name, r.status) for r in records] == [("bad", "broken"), ("plain", "ready")]


def test_a_name_claimed_twice_is_nobodys(here: str):
    both = [point("plain", f"{here}:Plain"), point("plain", f"{here}:FromTomorrow")]
    records = load_adapters(both)
    assert [record.status for record in records] == ["duplicate", "duplicate"]
    with pytest.raises(AdapterLoadError, match=r"duplicate.*uninstall one"):
        find_adapter("plain", records)


def test_an_unknown_name_is_answered_with_the_known_ones(here: str):
    records = load_adapters([point("plain", f"{here}:Plain")])
    with pytest.raises(AdapterLoadError, match="no adapter named 'plane'; known: plain"):
        find_adapter("plane", records)
    with pytest.raises(AdapterLoadError, match="known: none"):
        find_adapter("plane", [])


def test_the_built_in_ones_are_registered_like_any_other():
    ready = {record.name: record for record in load_adapters() if record.status == "ready"}
    assert {"json", "packed", "recording"} <= ready.keys()
    assert "canticle" in ready["json"].origin
    assert find_adapter("json") is JsonAdapter


PLUG_IN = """
from canticle_daemon.adapter_api import Adapter

class KestrelAdapter(Adapter):
    name = "kestrel"

    def decode(self, datagram):
        return None
"""


@pytest.fixture
def installed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A distribution of a stranger, as pip would have unpacked it."""
    (tmp_path / "kestrel_telemetry.py").write_text(PLUG_IN)
    (tmp_path / "kestrel_broken.py").write_text("raise RuntimeError('needs a license')\n")
    info = tmp_path / "kestrel_telemetry-2.1.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: kestrel-telemetry\nVersion: 2.1\n")
    (info / "entry_points.txt").write_text(
        f"[{GROUP}]\n"
        "kestrel = kestrel_telemetry:KestrelAdapter\n"
        "kestrel-pro = kestrel_broken:KestrelPro\n"
    )
    monkeypatch.syspath_prepend(str(tmp_path))
    return tmp_path


def test_an_installed_plug_in_is_found_beside_the_built_in_ones(installed: Path):
    records = {record.name: record for record in load_adapters()}
    assert records["kestrel"].status == "ready"
    assert records["kestrel"].origin == "kestrel-telemetry: kestrel_telemetry:KestrelAdapter"
    assert records["kestrel-pro"].status == "broken"
    assert "RuntimeError: needs a license" in records["kestrel-pro"].reason
    assert records["json"].status == "ready"
    assert find_adapter("kestrel") is import_module("kestrel_telemetry").KestrelAdapter


def test_a_broken_plug_in_is_told_and_stops_nothing(installed: Path):
    told = io.StringIO()
    parts = gather(Config(), Console(told))
    assert parts.adapter.name == "json"
    assert "adapter kestrel-pro" in told.getvalue()
    assert "needs a license" in told.getvalue()
