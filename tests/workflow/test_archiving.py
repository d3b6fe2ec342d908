"""A finished study becomes an archive that validators accept, that answers questions, and that runs again."""

import gzip
import io
import json
import shutil
import subprocess
from pathlib import Path

import bagit
import pytest
from requests import Request, Response
from requests_cache import CachedSession
from rocrate_validator import models, services
from urllib3.response import HTTPResponse

from odograph.command.main import main
from odograph.provenance.archive.agreement import compare_runs
from odograph.provenance.root import read_root
from odograph.provenance.verify import verify

CONTEXT = Path(__file__).with_name("data") / "ro-crate-1.1-context.jsonld.gz"
PROFILES = ("ro-crate-1.1", "process-run-crate", "workflow-run-crate")


@pytest.fixture(scope="module")
def bag(finished, tmp_path_factory):
    """The archive of the finished study, a folder, recordings enclosed."""
    target = tmp_path_factory.mktemp("archived") / "bag"
    assert main(["archive", str(target), "--study", str(finished.folder), "--with-recordings"]) == 0
    return target


@pytest.fixture(scope="module")
def crate(bag):
    """The crate's entities by identifier."""
    document = json.loads((bag / "data/ro-crate-metadata.json").read_text())
    return {entity["@id"]: entity for entity in document["@graph"]}


def ids(value):
    return [entry["@id"] for entry in (value if isinstance(value, list) else [value])]


def test_the_bag_is_valid(bag, finished):
    """By the bagit library, and by coreutils as the README inside says."""
    assert bagit.Bag(str(bag)).validate()
    command = ["sha256sum", "--quiet", "-c", "manifest-sha256.txt"]
    assert subprocess.run(command, cwd=bag, check=False).returncode == 0
    assert read_root(finished.folder)["root"] in (bag / "data/README.md").read_text()


@pytest.fixture(scope="module")
def validator_cache(tmp_path_factory):
    """The validator's cache with the context in it, so that no network is needed."""
    cache, content = tmp_path_factory.mktemp("cache") / "http", gzip.decompress(CONTEXT.read_bytes())
    session = CachedSession(cache_name=str(cache), backend="sqlite", expire_after=-1)
    url = "https://w3id.org/ro/crate/1.1/context"
    headers = {"Accept": "application/ld+json, application/json, */*;q=0.1"}
    request = session.prepare_request(Request("GET", url, headers=headers))
    response = Response()
    response.status_code, response.url, response.request = 200, url, request
    response.headers["Content-Type"], response.encoding = "application/ld+json", "utf-8"
    response._content, response.reason = content, "OK"
    response.raw = HTTPResponse(
        body=io.BytesIO(content), headers={"Content-Type": "application/ld+json"}, status=200,
        preload_content=False, request_url=url,
    )  # fmt: skip
    session.cache.save_response(response)
    return cache


@pytest.mark.parametrize("profile", PROFILES)
def test_the_crate_is_valid(bag, validator_cache, profile):
    """By roc-validator 0.13, at the level of what is required."""
    settings = services.ValidationSettings(
        rocrate_uri=str(bag / "data"), profile_identifier=profile,
        requirement_severity=models.Severity.REQUIRED, offline=True, cache_path=str(validator_cache),
    )  # fmt: skip
    result = services.validate(settings)
    assert not result.has_issues(), [issue.message for issue in result.get_issues()]


def test_the_archive_verifies_where_it_is_unpacked(bag, finished):
    found = verify(bag / "data")
    assert found.breaches == [] and found.root == read_root(finished.folder)["root"]


def test_the_same_run_gives_the_same_bytes(finished, tmp_path):
    for name in ("one.zip", "two.zip"):
        assert main(["archive", str(tmp_path / name), "--study", str(finished.folder)]) == 0
    assert (tmp_path / "one.zip").read_bytes() == (tmp_path / "two.zip").read_bytes()


def test_a_study_that_was_changed_is_not_archived(finished, tmp_path, capsys):
    study = tmp_path / "study"
    shutil.copytree(finished.folder, study)
    (study / "results/population/units.tsv").write_text("mine\n")
    assert main(["archive", str(tmp_path / "bag"), "--study", str(study)]) == 1
    assert "results/population/units.tsv" in capsys.readouterr().err
    assert not (tmp_path / "bag").exists()


# The competency questions of the Workflow Run RO-Crate group (docs/requirements.md of the profiles).


def test_which_container_images_were_used(crate):
    """None were, and none is claimed."""
    assert not [entity for entity in crate.values() if "containerImage" in entity]


def test_how_long_and_how_much_did_each_step_take(crate):
    for action in actions(crate):
        assert action["startTime"] <= action["endTime"] and action["endTime"].endswith("+00:00")
        usage = crate[ids(action["resourceUsage"])[0]]
        assert float(usage["value"]) >= 0 and usage["unitText"] == "s"


def actions(crate):
    found = [entity for entity in crate.values() if entity["@type"] == "CreateAction"]
    assert len(found) > 10
    return found


def test_which_configuration_files_were_used(crate):
    for action in actions(crate):
        assert {"config/config.yaml", "config/sessions.tsv"} <= set(ids(action["object"]))


def test_in_which_environment_did_each_step_run(crate):
    for action in actions(crate):
        tool = crate[ids(action["instrument"])[0]]
        needed = [crate[name] for name in ids(tool["softwareRequirements"])]
        if tool["@id"] == "Snakefile":
            assert {entity["@id"] for entity in needed} == {"constraints.txt", "environment.yml"}
        else:
            assert {"python", "numpy", "scipy"} <= {entity["name"] for entity in needed}
            assert all(entity["softwareVersion"] for entity in needed)


def test_did_the_run_succeed(crate):
    assert {action["actionStatus"] for action in actions(crate)} == {
        "http://schema.org/CompletedActionStatus"
    }


def test_what_went_into_the_run_and_each_step_and_what_came_out(crate, finished):
    whole = crate["#run"]
    assert {"recordings/bracken_1.nwb", "recordings/sorrel_1.nwb"} <= set(ids(whole["object"]))
    assert {"results/report.html", "results/population/units.tsv"} <= set(ids(whole["result"]))
    drawn = crate["#run-population_figures"]
    assert "results/population/units.parquet" in ids(drawn["object"])
    assert "results/figures/composition.png" in ids(drawn["result"])
    fitted = crate["#run-encoding-alpha"]
    assert "results/sessions/alpha/behaviour/behaviour.parquet" in ids(fitted["object"])
    assert "recordings/bracken_1.nwb" in ids(fitted["object"])
    for action in actions(crate):
        assert set(ids(action["result"])) <= set(crate)


def test_which_version_of_the_code_and_which_engine(crate):
    workflow = crate["Snakefile"]
    assert set(workflow["@type"]) == {"File", "SoftwareSourceCode", "ComputationalWorkflow"}
    assert workflow["version"] and crate[ids(workflow["programmingLanguage"])[0]]["version"]
    assert {"workflow/rules/encoding.smk", "src/odograph/encoding/fit.py"} <= set(ids(workflow["hasPart"]))
    steps = [entity for name, entity in crate.items() if name.startswith("#step-")]
    assert all(entity["identifier"] and entity["softwareVersion"] for entity in steps)


def test_how_did_parameters_reach_the_workflow(crate):
    parameters = [crate[name] for name in ids(crate["Snakefile"]["input"])]
    assert all(entity["@type"] == "FormalParameter" for entity in parameters)
    value = crate["#value-intake.front_point"]
    assert value["value"] == "led_front" and ids(value["exampleOfWork"]) == ["#parameter-intake.front_point"]
    assert "#value-intake.front_point" in ids(crate["#run"]["object"])


def test_recordings_that_are_not_enclosed_are_named_by_digest(finished, tmp_path):
    target, at = tmp_path / "bag", "https://example.org/set"
    arguments = ["archive", str(target), "--study", str(finished.folder), "--recordings-at", at]
    assert main(arguments) == 0
    graph = json.loads((target / "data/ro-crate-metadata.json").read_text())["@graph"]
    (one,) = [entity for entity in graph if entity.get("name") == "bracken_1.nwb"]
    row = next(row for row in read_root(finished.folder)["recordings"] if row["session"] == "alpha")
    assert one["sha256"] == row["digest"].removeprefix("sha256:") and one["contentSize"] == str(row["bytes"])
    assert f"{at}/bracken_1.nwb" in (target / "data/recordings.tsv").read_text()
    assert not list(target.rglob("*.nwb"))
    # Whoever has the recordings can lay the study out again.
    assert main(["replay", str(target), "--into", str(tmp_path / "again")]) == 66


def test_an_archive_runs_again_elsewhere_and_agrees(bag, finished, tmp_path, capsys):
    """In an empty folder, from a copy; with the present libraries, which the suite has at hand."""
    copy = tmp_path / "copy"
    shutil.copytree(bag, copy)
    into = tmp_path / "empty" / "again"
    status = main(["replay", str(copy), "--into", str(into), "--environment", "here", "--json"])
    told = json.loads(capsys.readouterr().out)
    wrong = [product for product in told["products"] if product["verdict"] in ("differs", "missing")]
    assert (status, wrong, told["agrees"], told["software"]) == (0, [], True, {})
    assert told["roots"][0] == told["roots"][1] == read_root(finished.folder)["root"]
    assert {one.verdict for one in compare_runs(finished.folder, into / "study")} == {"same bytes"}


def test_a_damaged_archive_is_not_run(bag, tmp_path, capsys):
    copy = tmp_path / "copy"
    shutil.copytree(bag, copy)
    (copy / "data/config/config.yaml").write_text("study: {}\n")
    assert main(["replay", str(copy), "--into", str(tmp_path / "again"), "--environment", "here"]) == 66
    assert "config/config.yaml was changed" in capsys.readouterr().err
