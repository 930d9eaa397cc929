"""What docs/operating.md tells operators to copy, held to what the program takes and serves."""

import configparser
import json
import re
import shlex
from dataclasses import replace
from pathlib import Path, PurePosixPath

import pytest
import typer
import yaml

from stream import errors, kernel
from stream.cli.main import app
from stream.settings import load
from tests.test_operating import GOOD, LIVE, page_of, values

HERE = Path(__file__).parents[1]
PAGE = (HERE / "docs" / "operating.md").read_text("utf-8")
FIELDS = '[[fields]]\npath = "note"\nkind = "words"\n'
FULL = replace(LIVE, rejects={"bad_json": 1}, log_loss=0.5, calibration_ratio=1.0, nonzeros=3)
SERVED = {key[0] for key in values(page_of(FULL, GOOD).page()[0].decode())}


def blocks(language):
    return re.findall(rf"```{language}\n(.*?)```", PAGE, re.DOTALL)


def documents():
    """The YAML blocks by what they hold."""
    found = [yaml.safe_load(text) for text in blocks("yaml")]
    return {next(iter(set(one) & {"groups", "scrape_configs", "kind"})): one for one in found}


def parsed(words):
    """What the command line makes of a call, without running it."""
    name, *arguments = words
    assert name == "bedload"
    command = typer.main.get_command(app)
    with command.make_context(name, arguments) as context:
        _, chosen, left = command.resolve_command(context, [*context._protected_args, *context.args])
        with chosen.make_context(chosen.name, left, parent=context) as inner:
            return chosen.name, inner.params


@pytest.fixture
def unit():
    (text,) = blocks("ini")
    parser = configparser.ConfigParser(interpolation=None)
    parser.optionxform = str
    parser.read_string(text)
    return parser["Service"]


@pytest.fixture
def container():
    (text,) = blocks("dockerfile")
    lines = [line.split(maxsplit=1) for line in text.splitlines()]
    return [(word, rest) for word, rest in lines]


@pytest.fixture
def pod():
    return documents()["kind"]["spec"]["template"]["spec"]


def only(container, word):
    (found,) = [rest for name, rest in container if name == word]
    return found


# ---- first start -----------------------------------------------------------------------------------------


def test_the_keys_of_the_first_start_load_and_are_kept_by_no_default(tmp_path):
    (text,) = blocks("toml")
    (tmp_path / "bedload.toml").write_text(text + FIELDS)
    found = load(tmp_path / "bedload.toml", environ={})
    assert found.feed.kind == "topic" and found.feed.servers and found.feed.start
    assert None not in (found.feed.topic, found.learner.horizon, found.rejects.topic, found.scores.topic)
    assert found.worker.metrics_port is not None


def test_the_calls_of_the_first_start_are_taken_and_the_proof_is_another_folder_than_the_worker():
    lines = [line for text in blocks("sh") for line in text.splitlines()]
    calls = [parsed(shlex.split(line)) for line in lines if line.startswith("bedload")]
    assert [name for name, _ in calls] == ["init", "replay", "work", "snapshots", "replay"]
    worker, proof = calls[2][1]["state"], calls[4][1]
    assert proof["journal"] == worker != proof["state"]
    assert {"handoffs.rejected", "handoffs.scored"} <= {word for line in lines for word in line.split()}


# ---- metrics and alerts ----------------------------------------------------------------------------------


def test_the_table_of_metrics_has_what_is_served_and_nothing_else():
    table = set(re.findall(r"`(bedload_\w+)", PAGE.split("## The log")[0].split("```yaml")[0]))
    served = {re.sub(r"(_bucket|_sum|_count|_created)$", "", name) for name in SERVED}
    assert table == {name for name in served if name.startswith("bedload_")}


def test_alerts_ask_for_metrics_that_are_served():
    (group,) = documents()["groups"]["groups"]
    assert len(group["rules"]) >= 5
    for rule in group["rules"]:
        assert set(rule) <= {"alert", "expr", "for"}
        asked = set(re.findall(r"\b(?:bedload|process)_\w+", rule["expr"])) or {"up"}
        assert asked <= SERVED | {"up"}, rule["alert"]


def test_alerts_and_scraping_speak_of_one_job_at_one_port(pod):
    (scrape,) = documents()["scrape_configs"]["scrape_configs"]
    jobs = set(re.findall(r'job="([^"]*)"', str(documents()["groups"])))
    assert jobs == {scrape["job_name"]}
    (target,) = scrape["static_configs"][0]["targets"]
    (worker,) = pod["containers"]
    assert target.endswith(f":{worker['ports'][0]['containerPort']}")
    assert f"worker.metrics_port = {target.rpartition(':')[2]}" in PAGE


# ---- systemd ---------------------------------------------------------------------------------------------


def test_the_unit_runs_a_call_that_the_command_line_takes(unit):
    program, *arguments = shlex.split(unit["ExecStart"])
    name, taken = parsed([PurePosixPath(program).name, *arguments])
    assert name == "work"
    assert str(taken["state"]) == f"/var/lib/{unit['StateDirectory']}"
    assert str(taken["config"]) in PAGE.split("```ini")[0], "the text says where the settings are"


def test_kernels_are_kept_in_the_units_cache_directory(unit, monkeypatch):
    variable, _, value = unit["Environment"].partition("=")
    monkeypatch.delenv("NUMBA_CACHE_DIR", raising=False)
    monkeypatch.setenv(variable, value.replace("%C", "/var/cache"))
    assert kernel._caches() == f"/var/cache/{unit['CacheDirectory']}"


def exits():
    """Whether the page has it that a new start may help, by exit code."""
    return {int(code): said == "yes" for code, said in re.findall(r"^\| (\d+) \| (yes|no) \|", PAGE, re.M)}


def test_every_exit_code_is_on_the_page():
    kinds = [kind for kind in vars(errors).values() if isinstance(kind, type)]
    codes = {kind.exit_code for kind in kinds if issubclass(kind, errors.BedloadError)}
    assert set(exits()) == codes | {0, 70}


def test_the_unit_starts_again_only_where_the_page_says_that_it_may_help(unit):
    never = {code for code, helps in exits().items() if code and not helps}
    assert {int(code) for code in unit["RestartPreventExitStatus"].split()} == never


# ---- container -------------------------------------------------------------------------------------------


def test_the_container_copies_what_is_there_and_runs_a_call_that_the_command_line_takes(container, pod):
    for word, rest in container:
        for source in rest.split()[:-1] if word == "COPY" else ():
            assert (HERE / source).exists(), source
    (worker,) = pod["containers"]
    name, taken = parsed([*json.loads(only(container, "ENTRYPOINT")), *worker["args"]])
    assert name == "work"
    mounts = {one["name"]: PurePosixPath(one["mountPath"]) for one in worker["volumeMounts"]}
    assert PurePosixPath(str(taken["config"])).parent == mounts["settings"]
    assert PurePosixPath(str(taken["state"])).parent == mounts["state"]
    variable, _, cache = only(container, "ENV").partition("=")
    assert variable == "XDG_CACHE_HOME"
    assert PurePosixPath(cache).parent == mounts["state"] != PurePosixPath(str(taken["state"]))


def test_the_pod_runs_as_the_containers_user(container, pod):
    user = int(only(container, "USER"))
    assert pod["securityContext"] == {"runAsUser": user, "runAsNonRoot": True, "fsGroup": user}
    assert f"--uid {user}" in only(container, "RUN")


def test_the_pods_settings_open_the_port_that_its_probes_ask(pod, tmp_path):
    (worker,) = pod["containers"]
    (tmp_path / "bedload.toml").write_text(FIELDS)
    changes = [word for word in worker["args"] if word != "--set"]
    found = load(tmp_path / "bedload.toml", changes, environ={}).worker
    (port,) = worker["ports"]
    assert port == {"name": "metrics", "containerPort": found.metrics_port}
    assert found.metrics_address == "0.0.0.0", "probes come from outside the pod"
    probes = {name: worker[f"{name}Probe"]["httpGet"] for name in ("liveness", "startup", "readiness")}
    assert {probe["port"] for probe in probes.values()} == {"metrics"}
    assert probes["readiness"]["path"] == "/readyz"
    assert probes["liveness"]["path"] == probes["startup"]["path"] == "/healthz"


def test_every_volume_that_is_mounted_is_there_and_the_state_outlives_the_pod(pod):
    manifest = documents()["kind"]
    (worker,) = pod["containers"]
    claims = {claim["metadata"]["name"] for claim in manifest["spec"]["volumeClaimTemplates"]}
    volumes = {volume["name"] for volume in pod["volumes"]} | claims
    assert {mount["name"] for mount in worker["volumeMounts"]} == volumes
    assert "state" in claims
    assert manifest["spec"]["selector"]["matchLabels"] == manifest["spec"]["template"]["metadata"]["labels"]
    assert manifest["spec"]["replicas"] == 1


def test_both_give_a_stopping_worker_the_same_time(unit, pod):
    assert int(unit["TimeoutStopSec"]) == pod["terminationGracePeriodSeconds"] > 10
