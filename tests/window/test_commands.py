"""The chain of commands of the help, exactly as it is written there, in the real command line."""

import html
import json
import re
import subprocess
from pathlib import Path

import pytest

pytestmark = pytest.mark.window

ROOT = Path(__file__).resolve().parent.parent.parent


@pytest.fixture
def chain():
    """The script of the help page."""
    page = (ROOT / "plugin" / "help" / "commands.html").read_text(encoding="utf-8")
    found = re.search(r'<pre id="chain"><code>(.*?)</code></pre>', page, re.DOTALL)
    return html.unescape(found.group(1)).strip() + "\n"


def test_the_chain_of_the_help_hands_numbers_on_and_publishes_nothing_that_is_not_clean(
    chain, headless, tmp_path
):
    osgeo = pytest.importorskip("osgeo.ogr")
    folder = tmp_path / "an empty folder"
    folder.mkdir()
    (folder / "chain.sh").write_text(chain, encoding="utf-8")
    ran = subprocess.run(
        ["bash", "chain.sh"], cwd=folder, env=headless, capture_output=True, text=True,
        timeout=200, check=False,
    )  # fmt: skip
    logs = "\n".join(path.read_text(errors="replace")[-1500:] for path in folder.glob("*.log"))
    assert ran.returncode == 0, ran.stdout + ran.stderr + logs

    def answer(step):
        return json.loads((folder / f"{step}.json").read_text(encoding="utf-8"))

    advised = answer("bandwidthadvice")["results"]["ADVISED"]
    used = answer("adaptivedensity")["results"]["BANDWIDTH_USED"]
    assert advised > 0 and used == pytest.approx(advised)
    # a ward of so small a district has fewer falls than the least count, and that is public
    source = osgeo.Open(str(folder / "ostermoor.gpkg"))
    small = [one["falls"] for one in source.GetLayer("care_wards") if 0 < one["falls"] < 10]
    assert small and answer("releaseaudit")["results"]["CLEAN"] == 0
    assert "Not published" in ran.stdout
    assert not (folder / "published.gpkg").exists()
    assert (folder / "waiting.gpkg").exists() and (folder / "audit.html").exists()
