"""With none of the extras installed the service starts and takes events, as the README's first command asks of it.

Every test's environment has all extras, so a child process is made that cannot import their packages.
"""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from importlib.metadata import packages_distributions
from pathlib import Path

ROOT = Path(__file__).parents[2]
SERVING = """
import asyncio, sys
from pathlib import Path

class Absent:
    def find_spec(self, name, path=None, target=None):
        if name.partition(".")[0] in {absent!r}:
            raise ModuleNotFoundError(f"No module named {{name!r}}", name=name.partition(".")[0])

sys.meta_path.insert(0, Absent())

from aiohttp import ClientSession
from strandline.app import Service
from strandline.cli import main
from strandline.config import parse
from strandline_loadgen import demo, driver, stores

file = Path({folder!r}) / "strandline.toml"
file.write_text(f'listen = "127.0.0.1:0"\\ndata_dir = "{{file.parent}}/data"\\n[[feed]]\\nname = "gauges"\\n')
assert main(["check", str(file)]) == 0
assert main(["cluster", "--url", "http://127.0.0.1:1"]) == 3, "nobody listens there"

async def serve():
    service = Service(parse(file.read_text(), {{}}))
    await service.start()
    try:
        async with ClientSession() as session:
            body = b'{{"time":"2026-01-01T00:00:00Z"}}\\n'
            async with session.post(f"{{service.url}}/v1/feeds/gauges/events", data=body,
                                    headers={{"Content-Type": "application/x-ndjson"}}) as answer:
                assert (await answer.json())["accepted"] == 1
            for path in ("/v1/feeds", "/metrics", "/health/ready", "/openapi.json", "/"):
                async with session.get(f"{{service.url}}{{path}}") as answer:
                    assert answer.status == 200, path
    finally:
        await service.stop()

asyncio.run(serve())
print("served")
"""


def packages_of_extras() -> set[str]:
    """The modules that extras bring and the base does not, as they are imported."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    extras = project["optional-dependencies"]
    named = {_name(each) for extra, needs in extras.items() if extra != "test" for each in needs}
    based = {_name(each) for each in project["dependencies"]}
    by_distribution: dict[str, set[str]] = {}
    for module, distributions in packages_distributions().items():
        for distribution in distributions:
            by_distribution.setdefault(_name(distribution), set()).add(module)
    return set().union(*(by_distribution[name] for name in named - based))


def _name(requirement: str) -> str:
    found = re.match(r"[A-Za-z0-9._-]+", requirement)
    assert found is not None, requirement
    return re.sub(r"[-_.]+", "-", found[0]).lower()


def test_the_extras_are_known_by_their_modules() -> None:
    assert packages_of_extras() >= {"nats", "paho", "pyarrow", "asyncpg", "cramjam", "matplotlib", "numba"}


def test_the_service_works_without_them(tmp_path: Path) -> None:
    program = SERVING.format(absent=packages_of_extras(), folder=str(tmp_path))
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=False, timeout=60)
    assert done.returncode == 0 and done.stdout.endswith("served\n"), done.stderr[-2000:]
