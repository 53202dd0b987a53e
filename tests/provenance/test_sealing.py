"""What a sealed archive holds, that its bytes repeat, and that the validators of its formats take it."""

from __future__ import annotations

import csv
import hashlib
import json
import os
import re
import subprocess
import sys
import warnings
import zipfile
from pathlib import Path
from types import SimpleNamespace
from urllib.parse import unquote

import bagit
import jsonschema
import pytest
import yaml
from rocrate.rocrate import ROCrate

from campaign import __version__
from campaign.archive import CAMPAIGN_LABEL, campaign_in, hash_in_comment_holds, sha512_of
from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.provenance.bag import bag_files, check_bag, manifest_text, read_info, read_manifest
from campaign.provenance.ro_crate import described_paths
from campaign.provenance.sealing import Sealed, earlier_not_followed, places_of_campaigns, write_sealed
from tests.provenance.conftest import write_whole_campaign

CFF_SCHEMA = Path(__file__).parents[1] / "reference" / "citation_file_format" / "schema.json"


def files_below(folder: Path) -> dict[str, bytes]:
    return {
        p.relative_to(folder).as_posix(): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()
    }


def rows_of(file: Path) -> list[dict[str, str]]:
    with file.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def test_the_archive_is_the_same_to_the_byte_sealed_elsewhere_by_its_own_wheel(
    sealed: Path, unpacked: Path, tmp_path: Path
) -> None:
    """Another folder, hash seed, time zone, umask and file dates; the program installed from the archive.

    So the wheel that is written without any build tool installs by pip with nothing else at hand, and reports
    and seals the same as the program that sealed it.
    """
    wheel = next((unpacked / "data" / "software").glob("*.whl"))
    target = tmp_path / "installed"
    install = ["install", "--quiet", "--no-index", "--no-deps", "--no-compile", "--target", str(target)]
    subprocess.run([sys.executable, "-m", "pip", *install, str(wheel)], check=True)
    folder = write_whole_campaign(tmp_path / "other home")
    for number, file in enumerate(sorted(folder.rglob("*"))):
        os.utime(file, (number * 1000, number * 1000))
    again = tmp_path / "another name.zip"
    environment = {
        **os.environ,
        "PYTHONPATH": str(target),
        "PYTHONHASHSEED": "4711",
        "TZ": "Asia/Tokyo",
        "PYTHONDONTWRITEBYTECODE": "1",
    }
    command = [sys.executable, "-m", "campaign", "seal", str(folder), "--into", str(again)]
    done = subprocess.run(
        command, cwd=tmp_path, env=environment, check=True, capture_output=True, text=True, umask=0o077
    )
    assert sha512_of(again) in done.stdout
    # its own folder lies as deep as the farthest climb to an earlier campaign
    assert "name-not-for-windows (1)" in done.stdout
    assert "up/this_campaign/protocol 12:30 | really?.txt" in done.stdout
    with zipfile.ZipFile(sealed) as one, zipfile.ZipFile(again) as other:
        assert [i.filename for i in one.infolist()] == [i.filename for i in other.infolist()]
        assert [n for n in one.namelist() if one.read(n) != other.read(n)] == []
    assert again.read_bytes() == sealed.read_bytes()
    assert hash_in_comment_holds(again) is True


def test_the_campaigns_folder_is_in_it_unaltered(campaign_folder: Path, unpacked: Path) -> None:
    own = campaign_in(unpacked)
    assert files_below(own) == files_below(campaign_folder)
    assert {"certificates/stage 2025.pdf", "protocol.md", "photos/名前 ü.bin"} <= files_below(own).keys()


def test_earlier_campaigns_lie_where_the_description_says(campaign_folder: Path, unpacked: Path) -> None:
    own = campaign_in(unpacked)
    for named in ("../shelf/before the first", "../../older"):
        assert f'folder = "{named}"' in (own / "campaign.toml").read_text("utf-8")
        assert files_below((own / named).resolve()) == files_below((campaign_folder / named).resolve())
    assert (own / "../../older").resolve().is_relative_to(unpacked / "data")


def test_tables_records_and_site_are_in_it(unpacked: Path) -> None:
    data = unpacked / "data"
    site = data / "ro-crate-preview_files"
    for place in ("tables", "records"):
        assert files_below(data / place) == files_below(site / place)
        assert len(files_below(data / place)) > 5
    schema = json.loads((data / "tables" / "schema.json").read_bytes())
    described = {resource["path"] for resource in schema["resources"]}
    assert described == {name for name in files_below(data / "tables") if name.endswith(".csv")}
    assert (site / "index.html").is_file()


def test_the_preview_leads_to_the_site_without_a_script(unpacked: Path) -> None:
    page = (unpacked / "data" / "ro-crate-preview.html").read_text("utf-8")
    assert "<script" not in page
    assert " style=" not in page
    assert "default-src 'none'" in page
    for address in re.findall(r'(?:href|src)="([^"]+)"', page):
        if not address.startswith(("https://", "data:")):
            assert (unpacked / "data" / unquote(address)).exists(), address
    assert 'href="ro-crate-preview_files/index.html"' in page
    assert "invented data" in page


def test_files_set_aside_are_listed_with_their_reason(unpacked: Path) -> None:
    rows = rows_of(unpacked / "data" / "set_aside.csv")
    (own,) = (row for row in rows if row["fate"] == "set aside")
    assert own["file"] == "trials/run_007.csv"
    assert "the stand was knocked" in own["reason"]
    # earlier campaigns of three readings each are set aside as well, with what is wrong with them
    assert {row["code"] for row in rows if row is not own} == {"earlier-not-joined"}


def test_pins_name_what_runs(unpacked: Path) -> None:
    software = unpacked / "data" / "software"
    pins = (software / "requirements.txt").read_text("utf-8").splitlines()
    assert all(re.fullmatch(r"[A-Za-z0-9._-]+==[A-Za-z0-9.!+_-]+", pin) for pin in pins)
    names = {pin.split("==")[0].lower() for pin in pins}
    assert {"numpy", "scipy", "pandas", "statsmodels", "plotly", "jinja2", "markupsafe"} <= names
    assert "pytest" not in names
    versions = json.loads((software / "versions.json").read_bytes())
    assert versions["campaign-report"] == __version__
    assert f"numpy=={versions['packages']['numpy']}" in pins


def test_the_wheel_records_its_files(unpacked: Path) -> None:
    """PyPA binary distribution format: RECORD holds hash and size of every other file."""
    import base64

    file = next((unpacked / "data" / "software").glob("*.whl"))
    with zipfile.ZipFile(file) as wheel:
        record = next(name for name in wheel.namelist() if name.endswith("/RECORD"))
        rows = [line.rsplit(",", 2) for line in wheel.read(record).decode().splitlines()]
        assert {row[0] for row in rows} == set(wheel.namelist())
        for name, digest, size in rows:
            if name != record:
                content = wheel.read(name)
                expected = base64.urlsafe_b64encode(hashlib.sha256(content).digest()).decode().rstrip("=")
                assert (digest, size) == (f"sha256={expected}", str(len(content)))
    source = unpacked / "data" / "software" / "source"
    assert 'name = "campaign-report"' in (source / "pyproject.toml").read_text("utf-8")
    assert (source / "campaign" / "cli.py").read_bytes() == (
        Path(__file__).parents[2] / "campaign/cli.py"
    ).read_bytes()


def test_bagit_takes_the_bag(unpacked: Path) -> None:
    bag = bagit.Bag(str(unpacked))
    bag.validate()
    assert bag.version_info == (1, 0)
    assert set(bag.algorithms) == {"sha512"}
    payload = [p for p in (unpacked / "data").rglob("*") if p.is_file()]
    assert bag.info["Payload-Oxum"] == f"{sum(p.stat().st_size for p in payload)}.{len(payload)}"
    assert bag.info["Bagging-Date"] == "2025-03-10"
    assert (unpacked / bag.info[CAMPAIGN_LABEL] / "campaign.toml").is_file()
    tags = read_manifest((unpacked / "tagmanifest-sha512.txt").read_text("utf-8"))
    assert set(tags) == {"README.txt", "bag-info.txt", "bagit.txt", "manifest-sha512.txt"}


def test_the_usual_program_checks_the_manifest(unpacked: Path) -> None:
    command = ["sha512sum", "--check", "--strict", "--quiet", "manifest-sha512.txt"]
    subprocess.run(command, cwd=unpacked, check=True, capture_output=True)


def test_rocrate_reads_the_crate(unpacked: Path) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        crate = ROCrate(str(unpacked / "data"))
    assert crate.name == "Small invented panels"
    assert str(crate.datePublished)[:10] == "2025-03-10"
    assert crate.license.id == "https://creativecommons.org/licenses/by/4.0/"
    authors = crate.root_dataset["author"]
    assert [author["name"] for author in authors] == ["Author, Invented", "Another Invented Author"]
    assert authors[0].id == "https://orcid.org/0000-0002-1825-0097"
    assert authors[0]["affiliation"]["name"] == "Invented Laboratory"
    assert crate.preview.id == "ro-crate-preview.html"
    for entity in crate.data_entities:
        assert Path(entity.source).exists(), entity.id
        assert entity["name"]
        assert entity["description"]


def test_the_crate_keeps_the_rules_of_its_specification(unpacked: Path) -> None:
    """RO-Crate 1.2: flat, unique ids, every local reference described, root's obligatory properties."""
    data = unpacked / "data"
    crate = json.loads((data / "ro-crate-metadata.json").read_bytes())
    assert crate["@context"] == "https://w3id.org/ro/crate/1.2/context"
    entities = {entity["@id"]: entity for entity in crate["@graph"]}
    assert len(entities) == len(crate["@graph"])
    assert entities["ro-crate-metadata.json"]["conformsTo"] == {"@id": "https://w3id.org/ro/crate/1.2"}
    root = entities["./"]
    assert re.fullmatch(r"\d{4}-\d\d-\d\d", root["datePublished"])
    assert {"name", "description", "license", "author", "hasPart"} <= root.keys()
    for entity in crate["@graph"]:
        for values in entity.values():
            for value in values if isinstance(values, list) else [values]:
                if isinstance(value, dict):
                    assert set(value) == {"@id"}
                    assert value["@id"] in entities or value["@id"].startswith("https://w3id.org/ro/crate")
    held = [e["hasPart"] for e in crate["@graph"] if "hasPart" in e]
    assert all(isinstance(parts, dict) or len(parts) > 1 for parts in held)
    parts = {part["@id"] for these in held for part in ([these] if isinstance(these, dict) else these)}
    assert not [part for part in parts if part.startswith("ro-crate-preview")]
    described = set(described_paths((data / "ro-crate-metadata.json").read_bytes()))
    unlisted = {
        name
        for name in files_below(data)
        if name not in described and not name.startswith(("ro-crate-preview_files/", "software/source/"))
    }
    assert unlisted == set()


def test_the_citation_file_keeps_its_schema(unpacked: Path) -> None:
    citation = yaml.safe_load((unpacked / "data" / "CITATION.cff").read_text("utf-8"))
    jsonschema.validate(citation, json.loads(CFF_SCHEMA.read_bytes()), jsonschema.Draft7Validator)
    assert citation["title"] == "Small invented panels"
    assert citation["date-released"] == "2025-03-10"
    assert citation["license"] == "CC-BY-4.0"
    assert citation["authors"] == [
        {
            "family-names": "Author",
            "given-names": "Invented",
            "affiliation": "Invented Laboratory",
            "orcid": "https://orcid.org/0000-0002-1825-0097",
        },
        {"family-names": "Another Invented Author"},
    ]


def test_no_clock_host_or_user_is_in_what_was_written(unpacked: Path) -> None:
    words = {str(unpacked), str(Path.home()), os.uname().nodename, "/tmp/"}
    for name, content in files_below(unpacked / "data").items():
        if not name.startswith(("software/source/", "campaigns/", "ro-crate-preview_files/assets/")):
            text = content.decode("utf-8", "ignore")
            assert [word for word in words if len(word) > 4 and word in text] == [], name


def test_texts_for_a_paper_are_plain_and_cite(unpacked: Path) -> None:
    texts = unpacked / "data" / "texts"
    methods = (texts / "methods.md").read_text("utf-8")
    assert not re.search(r"<[a-z/]", methods)
    assert "invented" in methods
    entries = re.findall(r"@\w+\{(\w+),", (texts / "references.bib").read_text("utf-8"))
    assert {"fieller1954", "pattersonandthompson1971"} <= set(entries)
    assert len(re.findall(r"^- .+ \(\d{4}\)\. ", methods, re.MULTILINE)) == len(entries)
    availability = (texts / "data_availability.md").read_text("utf-8")
    assert "[repository, DOI]" in availability
    assert "CC-BY-4.0" in availability


def test_the_provenance_page_tells_how_to_cite_and_to_verify(unpacked: Path) -> None:
    page = (unpacked / "data" / "ro-crate-preview_files" / "provenance.html").read_text("utf-8")
    words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", page))
    availability = (unpacked / "data" / "texts" / "data_availability.md").read_text("utf-8").splitlines()[2]
    assert availability in words
    assert "campaign verify ARCHIVE.zip --recompute" in words
    assert "It does not show when or by whom. Deposit the files where a date is kept." in words
    assert re.search(r'href="method[^"]*paper[^"]*">text ready for a paper', page)
    assert "@misc{campaign2025," in words


def test_sealing_into_the_campaign_or_over_something_else_is_refused(
    campaign_folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    mine = tmp_path / "mine.zip"
    mine.write_bytes(b"mine")
    for into, words in (
        (campaign_folder / "a.zip", "inside the campaign"),
        (mine, "is no sealed archive"),
        (tmp_path, "is a folder"),
        (tmp_path / "nowhere" / "a.zip", "in no folder that exists"),
    ):
        assert main(["seal", str(campaign_folder), "--into", str(into)]) == 2
        assert words in " ".join(capsys.readouterr().err.split())
    assert mine.read_bytes() == b"mine"
    assert not (campaign_folder / "a.zip").exists()


def test_a_file_that_changes_while_it_is_packed_stops_the_sealing(tmp_path: Path) -> None:
    class Growing(type(tmp_path)):  # type: ignore[misc]
        """A file that somebody writes to whenever it is read."""

        def open(self, *words: object, **more: object) -> object:
            with Path(self).open("ab") as other:
                other.write(b"more")
            return super().open(*words, **more)

    file = Growing(tmp_path / "log.csv")
    Path(file).write_bytes(b"1")
    with pytest.raises(CampaignStops, match="changed after it was read"):
        write_sealed(Sealed({"a/log.csv": file}, ()), tmp_path / "out.zip")
    assert [p.name for p in tmp_path.iterdir()] == ["log.csv"]


@pytest.mark.parametrize(
    ("named", "own", "place"),
    [
        ("../2024", "campaigns/this_campaign", "campaigns/2024"),
        ("../../x/2024", "campaigns/up/this_campaign", "campaigns/x/2024"),
        ("old/2024", "campaigns/this_campaign", "campaigns/this_campaign/old/2024"),
        ("../this_campaign", "campaigns/this_campaign_", "campaigns/this_campaign"),
        ("./../a/../2024/", "campaigns/this_campaign", "campaigns/2024"),
    ],
)
def test_names_of_earlier_campaigns_lead_to_them_in_the_archive(
    tmp_path: Path, named: str, own: str, place: str
) -> None:
    folder = tmp_path / "a" / "b" / "mine"
    folder.mkdir(parents=True)
    (folder / named).resolve().mkdir(parents=True, exist_ok=True)
    found = places_of_campaigns(folder, ({"folder": named},))
    assert (found.own, list(found.earlier)) == (own, [place])
    assert os.path.normpath(f"{found.own}/{named}") == place


def test_earlier_campaigns_that_are_missing_are_noted_and_absolute_names_stop(tmp_path: Path) -> None:
    found = places_of_campaigns(tmp_path, ({"folder": "../gone"},))
    assert [(n.code, n.weight) for n in found.notices] == [("earlier-not-sealed", "noted")]
    assert found.earlier == {}
    for named in ("/data/2024", "C:\\data", "..\\2024", "C:/data"):
        with pytest.raises(CampaignStops, match="means nothing on another machine"):
            places_of_campaigns(tmp_path, ({"folder": named},))


def test_earlier_campaigns_of_an_earlier_campaign_are_told_of() -> None:
    earlier = [
        SimpleNamespace(where="../one", names_others=True),
        SimpleNamespace(where="b", names_others=False),
    ]
    (told,) = earlier_not_followed(SimpleNamespace(earlier=earlier))  # type: ignore[arg-type]
    assert (told.code, told.weight) == ("earlier-not-sealed", "noted")
    assert "'../one' names earlier campaigns of its own" in told.what
    assert told.done == "the archive does not hold those"


def test_a_bag_is_checked_by_its_own_rules(tmp_path: Path) -> None:
    files = bag_files({"a b.csv": b"1", "deep/ü.txt": b"2"}, {"Contact-Name": "A\nB"}, {"README.txt": b"r"})
    for name, content in files.items():
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_bytes(content if isinstance(content, bytes) else content.read_bytes())
    assert check_bag(tmp_path) == []
    bagit.Bag(str(tmp_path)).validate()
    assert read_info(files["bag-info.txt"].decode()) == {"Contact-Name": "A B", "Payload-Oxum": "2.2"}


def test_manifests_encode_what_would_break_their_lines() -> None:
    """RFC 8493, section 2.1.3: line feed, carriage return and per cent sign are percent-encoded."""
    hashes = {"data/50%.csv": "ab", "data/a\nb": "cd", "data/a\rb": "ef"}
    text = manifest_text(hashes)
    assert "data/50%25.csv" in text
    assert "data/a%0Ab" in text
    assert read_manifest(text) == hashes
