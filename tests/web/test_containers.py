"""The files for containers: sound YAML, commands that exist, nothing open that need not be, no secret inside."""

import re
import subprocess
import sys
from pathlib import Path

import jsonschema
import pytest
import yaml
from check_jsonschema.builtin_schemas import get_builtin_schema

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="module")
def compose() -> dict:
    return yaml.safe_load((ROOT / "docker-compose.yml").read_text(encoding="utf-8"))


def commands(compose: dict) -> list[list[str]]:
    """Every skylag command line of the compose file and the image."""
    image = re.search(r"^CMD (\[.*\])$", (ROOT / "Dockerfile").read_text(encoding="utf-8"), re.MULTILINE)
    assert image is not None
    found = [yaml.safe_load(image.group(1))]
    found += [service["command"] for service in compose["services"].values() if "command" in service]
    return found


def test_each_command_exists_with_its_options(compose: dict) -> None:
    for line in commands(compose):
        assert line[0] == "skylag"
        told = subprocess.run(
            [sys.executable, "-m", "skylag.cli", line[1], "--help"],
            cwd=ROOT / "backend", capture_output=True, text=True, check=False, timeout=60,
        )  # fmt: skip
        assert told.returncode == 0, told.stderr
        for option in line[2:]:
            if option.startswith("--"):
                assert option in told.stdout, f"skylag {line[1]} has no {option}"


def test_services_are_healthy_and_wait_for_one_another(compose: dict) -> None:
    assert set(compose["services"]) == {"db", "web", "worker", "watch"}
    for name, service in compose["services"].items():
        assert "healthcheck" in service and "test" in service["healthcheck"], name
        if name != "db":
            assert service["depends_on"]["db"]["condition"] == "service_healthy"
            assert service["read_only"] and service["cap_drop"] == ["ALL"], name
            assert service["environment"] == compose["services"]["web"]["environment"], "one archive"
            assert "data:/data" in service["volumes"], "one folder of slant tables and of what was sent"
    named = {volume.split(":")[0] for service in compose["services"].values() for volume in service.get("volumes", ())}
    assert {name for name in named if re.fullmatch(r"[a-z]+", name)} == set(compose["volumes"])


# Words of the Compose Specification (compose-spec.io: services, volumes) that this file may use, and their shapes.
DURATION = re.compile(r"(\d+(us|ms|s|m|h))+")
SERVICE_WORDS = {
    "image": str, "build": str, "restart": str, "environment": dict, "command": list, "ports": list, "volumes": list,
    "depends_on": dict, "healthcheck": dict, "read_only": bool, "tmpfs": list, "cap_drop": list, "security_opt": list,
    "stop_grace_period": str,
}  # fmt: skip
HEALTH_WORDS = {"test", "interval", "timeout", "retries", "start_period"}


def test_the_words_are_those_of_the_specification(compose: dict) -> None:
    assert set(compose) == {"services", "volumes"}, "`version` is obsolete"
    for name, service in compose["services"].items():
        assert re.fullmatch(r"[a-zA-Z0-9._-]+", name)
        assert ("image" in service) != ("build" in service)
        for word, value in service.items():
            assert isinstance(value, SERVICE_WORDS[word]), (name, word)
        assert service["restart"] in ("no", "always", "on-failure", "unless-stopped")
        health = service["healthcheck"]
        assert set(health) <= HEALTH_WORDS and health["test"][0] in ("CMD", "CMD-SHELL") and len(health["test"]) > 1
        spans = [health.get(word, "1s") for word in ("interval", "timeout", "start_period")]
        assert all(DURATION.fullmatch(span) for span in [*spans, service.get("stop_grace_period", "1s")])
        assert isinstance(health["retries"], int)
        for other, how in service.get("depends_on", {}).items():
            assert other in compose["services"]
            assert how["condition"] in ("service_started", "service_healthy", "service_completed_successfully")
        for volume in service.get("volumes", ()):
            source, target, *mode = re.sub(r"\$\{[^}]*\}", "./folder", volume).split(":")
            assert target.startswith("/") and mode in ([], ["ro"], ["rw"]), volume
            assert source.startswith(("./", "/")) or source in compose["volumes"], volume
        for port in service.get("ports", ()):
            assert re.fullmatch(r"(\d+\.){3}\d+:\d+:\d+", port)
        assert all(isinstance(value, str) for value in service.get("environment", {}).values())
        assert all(isinstance(word, str) for word in service.get("command", ()))
    text = (ROOT / "docker-compose.yml").read_text(encoding="utf-8")
    for asked in re.findall(r"\$\{([^}]*)\}", text):
        assert re.fullmatch(r"[A-Z_]+(:?[-?+].*)?", asked), asked


def by_the_schema(compose: dict) -> list[str]:
    """What the Compose Specification's own JSON schema has against a file, one sentence each."""
    schema = get_builtin_schema("vendor.compose-spec")
    check = jsonschema.validators.validator_for(schema)(schema)
    return [f"{'.'.join(map(str, error.absolute_path))}: {error.message}" for error in check.iter_errors(compose)]


def test_the_schema_of_the_specification_is_content(compose: dict, evidence) -> None:
    """And it does find what is wrong: a word it does not know, a wrong shape, a condition that there is none of."""
    evidence(
        "faults that the schema finds in the compose file",
        source="Compose Specification, JSON schema compose_spec.json (as shipped by check-jsonschema)", expected=0,
        got=len(by_the_schema(compose)), tolerance=0,
    )  # fmt: skip
    changes = [("restrat", "always"), ("ports", "8017:8017"), ("depends_on", {"db": {"condition": "healthy"}}),
               ("healthcheck", {"retires": 3}), ("read_only", [])]  # fmt: skip
    for word, value in changes:
        broken = {**compose, "services": {**compose["services"], "web": {**compose["services"]["web"], word: value}}}
        assert by_the_schema(broken), (word, value)


def test_only_the_loopback_address_is_published(compose: dict) -> None:
    ports = [port for service in compose["services"].values() for port in service.get("ports", ())]
    assert ports and all(port.startswith("127.0.0.1:") for port in ports)


def test_no_secret_is_written_down() -> None:
    """Passwords come from the environment, and starting without one fails."""
    text = (ROOT / "docker-compose.yml").read_text(encoding="utf-8")
    values = re.findall(r"(?:PASSWORD:|://\w+:)\s*(\S+?)(?:@|\s)", text)
    assert values and all(value.startswith("${SKYLAG_DB_PASSWORD:?") for value in values), values


def test_the_image_runs_without_rights() -> None:
    text = (ROOT / "Dockerfile").read_text(encoding="utf-8")
    user = text.index("\nUSER skylag")
    assert "useradd" in text[:user] and "RUN" not in text[user:]


def test_the_archive_url_is_one_that_opens(compose: dict) -> None:
    """The URL with a password put in is understood, and names a folder inside a volume of the service."""
    from skylag.archive import store

    web = compose["services"]["web"]
    url = store._url_of(re.sub(r"\$\{[^}]*\}", "pass", web["environment"]["SKYLAG_ARCHIVE"]))
    assert (url.host, url.database, url.username) == ("db", "skylag", "skylag")
    assert url.query["slant_folder"].startswith(web["volumes"][0].split(":")[1])


def test_the_ci_script_is_sound_bash() -> None:
    script = ROOT / ".ci" / "run"
    assert subprocess.run(["bash", "-n", str(script)], check=False).returncode == 0
    assert script.stat().st_mode & 0o111, "it must be executable"
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    text = script.read_text(encoding="utf-8")
    assert "python -m pytest --browser" in readme and "python -m pytest --browser" in text
    assert "SKYLAG_NO_SKIPS=1" in text
