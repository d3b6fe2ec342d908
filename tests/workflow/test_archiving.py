"""A finished study becomes an archive that validators accept, that answers questions, and that runs again."""

import gzip
import io
import json
import shutil
import socket
import subprocess
from pathlib import Path

import bagit
import pytest
from requests import Request, Response
from requests_cache import CachedSession
from rocrate_validator import models, services
from urllib3.response import HTTPResponse

from odograph.command.main import main
from odograph.errors import InputError
from odograph.provenance.archive.agreement import compare_runs
from odograph.provenance.archive.replay import lay_out
from odograph.provenance.root import read_root
from odograph.provenance.verify import verify

CONTEXT = Path(__file__).with_name("data") / "ro-crate-1.1-context.jsonld.gz"
ADDRESS = "https://example.org/set"
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


def issues(bag, cache, profile):
    settings = services.ValidationSettings(
        rocrate_uri=str(bag / "data"), profile_identifier=profile,
        requirement_severity=models.Severity.REQUIRED, offline=True, cache_path=str(cache),
    )  # fmt: skip
    return [issue.message for issue in services.validate(settings).get_issues()]


@pytest.mark.parametrize("profile", PROFILES)
def test_the_crate_is_valid(bag, validator_cache, profile):
    """By roc-validator 0.13, at the level of what is required."""
    assert issues(bag, validator_cache, profile) == []


def test_the_validator_would_find_what_is_wrong(bag, validator_cache, tmp_path):
    """The checks above can fail: a crate without a licence, and one whose workflow is not named."""
    for number, key in enumerate(("license", "mainEntity")):
        copy = tmp_path / str(number)
        shutil.copytree(bag, copy)
        path = copy / "data/ro-crate-metadata.json"
        document = json.loads(path.read_text())
        del next(entity for entity in document["@graph"] if entity["@id"] == "./")[key]
        path.write_text(json.dumps(document))
        assert issues(copy, validator_cache, "workflow-run-crate")


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


def test_which_script_wraps_each_tool(crate):
    """The module that a step's jobs start; the file is in the archive, by its digest."""
    steps = [entity for name, entity in crate.items() if name.startswith("#step-")]
    assert {action["instrument"]["@id"] for action in actions(crate)} == {
        "Snakefile",
        *(entity["@id"] for entity in steps),
    }
    for step in steps:
        (script,) = ids(step["hasPart"])
        assert script.endswith(f"/{step['@id'].removeprefix('#step-')}.py") and crate[script]["sha256"]


def test_how_did_parameters_reach_the_workflow(crate):
    parameters = [crate[name] for name in ids(crate["Snakefile"]["input"])]
    assert all(entity["@type"] == "FormalParameter" for entity in parameters)
    value = crate["#value-intake.front_point"]
    assert value["value"] == "led_front" and ids(value["exampleOfWork"]) == ["#parameter-intake.front_point"]
    for action in ("#run", "#run-intake-alpha"):
        assert "#value-intake.front_point" in ids(crate[action]["object"])
    assert "#value-intake.front_point" not in ids(crate["#run-encoding-alpha"]["object"])


@pytest.fixture(scope="module")
def bag_without(finished, tmp_path_factory):
    """The archive of the finished study, a folder, recordings by reference."""
    target = tmp_path_factory.mktemp("archived") / "bag"
    arguments = ["archive", str(target), "--study", str(finished.folder), "--recordings-at", ADDRESS]
    assert main(arguments) == 0
    return target


def test_recordings_that_are_not_enclosed_are_named_by_digest(finished, bag_without, tmp_path, capsys):
    graph = json.loads((bag_without / "data/ro-crate-metadata.json").read_text())["@graph"]
    (one,) = [entity for entity in graph if entity.get("name") == "bracken_1.nwb"]
    row = next(row for row in read_root(finished.folder)["recordings"] if row["session"] == "alpha")
    assert one["sha256"] == row["digest"].removeprefix("sha256:") and one["contentSize"] == str(row["bytes"])
    assert one["url"] == f"{ADDRESS}/bracken_1.nwb" and one["identifier"].startswith("gorse-heath/bracken_1")
    assert f"{ADDRESS}/bracken_1.nwb" in (bag_without / "data/recordings.tsv").read_text()
    assert f"fetched from {ADDRESS}" in (bag_without / "data/METHODS.md").read_text()
    assert not list(bag_without.rglob("*.nwb"))
    assert main(["replay", str(bag_without), "--into", str(tmp_path / "again")]) == 66
    assert f"fetch it from {ADDRESS}/bracken_1.nwb" in capsys.readouterr().err


def test_the_crate_without_recordings_is_valid(bag_without, validator_cache):
    assert bagit.Bag(str(bag_without)).validate()
    assert issues(bag_without, validator_cache, "workflow-run-crate") == []


def test_recordings_are_found_by_name_or_else_by_digest(finished, bag_without, tmp_path):
    data, study = tmp_path / "data", tmp_path / "study"
    shutil.copytree(finished.folder / "recordings", data / "deep" / "down")
    (data / "deep/down/sorrel_1.nwb").rename(data / "renamed.nwb")
    study.mkdir()
    lay_out(bag_without, study, data)
    assert (study / "recordings/sorrel_1.nwb").resolve() == data / "renamed.nwb"
    assert (study / "recordings/bracken_1.nwb").resolve() == data / "deep/down/bracken_1.nwb"
    # Into how many shards each session was divided, and no result.
    kept = [path.relative_to(study).as_posix() for path in (study / "results").rglob("*") if path.is_file()]
    assert kept == ["results/plan/shards.json"]
    assert {entry["shards"] for entry in json.loads((study / kept[0]).read_text()).values()} == {2}


def test_a_recording_of_that_name_with_another_content_is_refused(finished, bag_without, tmp_path):
    data, study = tmp_path / "data", tmp_path / "study"
    shutil.copytree(finished.folder / "recordings", data)
    shutil.copyfile(data / "bracken_1_resorted.nwb", data / "bracken_1.nwb")
    (data / "bracken_1_first.nwb").unlink()
    study.mkdir()
    with pytest.raises(InputError, match="not the recording of session alpha"):
        lay_out(bag_without, study, data)


def test_nothing_of_this_machine_is_inside(bag, bag_without, finished):
    """Neither host nor user nor a place; the records of the study itself do name the host."""
    host = socket.gethostname()
    assert finished.record("population/record.json")["run"]["host"] == host
    marks = [f"{finished.folder}", f"{Path.home()}/", f'"{host}"', f"@{host}"]
    for folder in (bag, bag_without):
        for path in folder.rglob("*"):
            if path.is_file() and path.suffix != ".nwb" and "src" not in path.parts:
                content = path.read_bytes()
                assert not [mark for mark in marks if mark.encode() in content], path
        records = [json.loads(path.read_text()) for path in folder.rglob("*record.json")]
        assert len(records) == len(read_root(finished.folder)["records"])
        assert not [record for record in records if "host" in record["run"]]


def test_recordings_from_elsewhere_get_a_place_in_the_archive(study, finished, tmp_path, capsys):
    """A sessions table with absolute paths: they stay at home, and the root is the same."""
    (study.folder / "recordings").rename(tmp_path / "elsewhere")
    for row in study.sessions.values():
        row["nwb"] = row["nwb"].replace("recordings", str(tmp_path / "elsewhere"))
    study.run()
    target = tmp_path / "bag"
    assert main(["archive", str(target), "--study", str(study.folder), "--with-recordings"]) == 0
    assert capsys.readouterr().err == ""
    table = (target / "data/config/sessions.tsv").read_text()
    assert "alpha\trecordings/bracken_1.nwb" in table and str(tmp_path) not in table
    found = verify(target / "data")
    assert found.breaches == [] and found.recordings == 4
    assert found.root == read_root(finished.folder)["root"]


@pytest.mark.long
def test_an_archive_runs_again_elsewhere_and_agrees(finished, tmp_path, capsys):
    """From a copy in an empty folder, in a fresh virtual environment that borrows the libraries at hand."""
    assert main(["archive", str(tmp_path / "whole.zip"), "--study", str(finished.folder)]) == 0
    empty = tmp_path / "empty"
    empty.mkdir()
    (tmp_path / "whole.zip").rename(empty / "copy.zip")
    into, data = empty / "again", finished.folder / "recordings"
    capsys.readouterr()
    options = ["--data", str(data), "--into", str(into), "--environment", "borrowed", "--json"]
    status = main(["replay", str(empty / "copy.zip"), *options])
    captured = capsys.readouterr()
    assert status == 0, captured.err
    told = json.loads(captured.out)
    wrong = [product for product in told["products"] if product["verdict"] in ("differs", "missing")]
    assert (wrong, told["agrees"], told["software"]) == ([], True, {})
    assert told["roots"][0] == told["roots"][1] == read_root(finished.folder)["root"]
    assert {one.verdict for one in compare_runs(finished.folder, into / "study")} == {"same bytes"}
    # The library that ran was the archive's, not the one that called it.
    python = into / "environment/bin/python"
    place = "import odograph; print(odograph.__file__)"
    done = subprocess.run([python, "-c", place], cwd=into, capture_output=True, text=True, check=True)
    assert Path(done.stdout.strip()).is_relative_to(into / "study")
    assert "steps are done" in captured.err


def test_a_damaged_archive_is_not_run(bag, tmp_path, capsys):
    copy = tmp_path / "copy"
    shutil.copytree(bag, copy)
    (copy / "data/config/config.yaml").write_text("study: {}\n")
    assert main(["replay", str(copy), "--into", str(tmp_path / "again"), "--environment", "here"]) == 66
    assert "config/config.yaml was changed" in capsys.readouterr().err
