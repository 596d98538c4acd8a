"""Making and opening a site, the raw archive, the quarantine and kept recipes."""

import json

import pytest

from flows.site import archive
from flows.site.layout import create_site, open_site
from flows.site.recipes import code_version, keep_recipe, read_recipe, recipe_path, source_digest
from models.errors import SiteError
from models.identity import content_id
from tests.flows.tiny_site import config_source, empty_site, tiny_recipe


def test_a_new_site_opens(tmp_path):
    source = config_source(tmp_path / "source")
    (source / "assays").mkdir()
    (source / "assays" / "a.toml").write_text("x = 1\n")
    site = create_site(tmp_path / "deep" / "site", source)
    assert open_site(tmp_path / "deep" / "site") == site
    assert (site.config / "assays" / "a.toml").read_text() == "x = 1\n"
    folders = {path.name for path in site.root.iterdir()}
    assert folders == {"config", "inbox", "raw", "quarantine", "lake", "ledger", "warehouse"}


def test_a_site_that_was_left_half_made_is_finished(tmp_path):
    source = config_source(tmp_path / "source")
    (tmp_path / "site" / "raw").mkdir(parents=True)
    (tmp_path / "site" / ".config-leftover").mkdir()
    with pytest.raises(SiteError, match="no halfsat site"):
        open_site(tmp_path / "site")
    assert create_site(tmp_path / "site", source) == open_site(tmp_path / "site")


@pytest.mark.parametrize(
    ("spoil", "what", "remedy"),
    [
        ("nothing there", "no such folder", "halfsat site new"),
        ("no site", "no halfsat site", "halfsat site new"),
        ("no settings", "config/site.toml is missing", "put the file back"),
        ("no raw", "folder raw/ is missing", "backup"),
        ("no ledger", "folder ledger/ is missing", "backup"),
    ],
)
def test_opening_says_what_is_missing_and_what_to_do(tmp_path, spoil, what, remedy):
    root = tmp_path / "site"
    if spoil == "no site":
        root.mkdir()
    elif spoil != "nothing there":
        site = empty_site(tmp_path)
        if spoil == "no settings":
            (site.config / "site.toml").unlink()
        else:
            (site.raw if spoil == "no raw" else site.ledger).rmdir()
    with pytest.raises(SiteError, match=what) as refused:
        open_site(root)
    assert remedy in refused.value.remedy
    assert str(root) in str(refused.value)


def test_lake_and_warehouse_may_be_missing(tmp_path):
    site = empty_site(tmp_path)
    site.lake.rmdir()
    site.warehouse.rmdir()
    assert open_site(site.root) == site


def test_making_a_site_overwrites_nothing(tmp_path):
    site = empty_site(tmp_path)
    with pytest.raises(SiteError, match="a site already"):
        create_site(site.root, tmp_path / "config-source")
    (tmp_path / "letters").mkdir()
    (tmp_path / "letters" / "to_ada.txt").write_text("Dear Ada")
    with pytest.raises(SiteError, match=r"not empty: it holds to_ada\.txt"):
        create_site(tmp_path / "letters", tmp_path / "config-source")
    with pytest.raises(SiteError, match=r"no site\.toml"):
        create_site(tmp_path / "other", tmp_path / "nowhere")
    assert not (tmp_path / "other").exists()


@pytest.mark.parametrize("name", ["what?", "a*", "[1]"])
def test_a_path_that_the_database_would_misread_is_refused(tmp_path, name):
    source = config_source(tmp_path / "source")
    with pytest.raises(SiteError, match="may not hold"):
        create_site(tmp_path / name, source)
    with pytest.raises(SiteError, match="may not hold"):
        open_site(tmp_path / name)


def test_archived_bytes_come_back_checked(tmp_path):
    site = empty_site(tmp_path)
    file_id = archive.keep(site, b"0,1.5\n")
    path = site.raw / file_id[:2] / file_id
    assert file_id == content_id(b"0,1.5\n")
    assert archive.fetch(site, file_id) == b"0,1.5\n"
    assert path.stat().st_mode & 0o777 == 0o444
    before = path.stat().st_mtime_ns
    assert archive.keep(site, b"0,1.5\n") == file_id
    assert path.stat().st_mtime_ns == before
    assert archive.condition(site, file_id) == "unchanged"


def test_a_damaged_or_lost_raw_file_is_found_and_mended_by_the_original(tmp_path):
    site = empty_site(tmp_path)
    file_id = archive.keep(site, b"0,1.5\n")
    path = archive.raw_path(site, file_id)
    path.chmod(0o644)
    path.write_bytes(b"0,1.6\n")
    assert archive.condition(site, file_id) == "changed"
    with pytest.raises(SiteError, match="has changed"):
        archive.fetch(site, file_id)
    archive.keep(site, b"0,1.5\n")
    assert archive.fetch(site, file_id) == b"0,1.5\n"
    path.unlink()
    assert archive.condition(site, file_id) == "missing"
    with pytest.raises(SiteError, match="missing"):
        archive.fetch(site, file_id)


@pytest.mark.parametrize(
    ("file_name", "kept_as"),
    [
        ("night7.csv", "night7.csv"),
        ("../../etc/passwd", "passwd"),
        ("C:\\data\\night 7.csv", "night_7.csv"),
        (".hidden", "hidden"),
        ("ü\n\x1b[31m", "_31m"),
        ("", "file"),
        ("x" * 300, "x" * 80),
    ],
)
def test_quarantine_keeps_bytes_and_reason_under_a_plain_name(tmp_path, file_name, kept_as):
    site = empty_site(tmp_path)
    path = archive.quarantine(site, b"\x00\xff", file_name, "no profile fits\n(make one)")
    assert path.parent == site.quarantine
    assert path.name == f"{content_id(bytes([0, 255]))[:12]}_{kept_as}"
    assert path.read_bytes() == b"\x00\xff"
    note = path.with_name(path.name + archive.REASON_SUFFIX).read_text()
    assert note.startswith("no profile fits\n(make one)\n")
    assert content_id(b"\x00\xff") in note
    assert "\x1b" not in note
    archive.release(site, content_id(b"\x00\xff"))
    assert list(site.quarantine.iterdir()) == []


def test_a_recipe_comes_back_as_it_was(tmp_path):
    site, recipe = empty_site(tmp_path), tiny_recipe()
    assert keep_recipe(site, recipe) is True
    assert keep_recipe(site, recipe) is False
    assert read_recipe(site, recipe.recipe_id) == recipe
    assert content_id(recipe_path(site, recipe.recipe_id).read_bytes()) == recipe.recipe_id
    assert recipe.row()["recipe"] == recipe_path(site, recipe.recipe_id).read_text()


def test_whatever_changes_a_result_changes_the_recipe_id():
    ids = {tiny_recipe().recipe_id, tiny_recipe(0.2).recipe_id}
    recipe = tiny_recipe()
    for changed in (
        {"code_version": "0.0+other"},
        {"assay_name": "other"},
        {"profile_name": "other"},
        {"assay": recipe.assay.model_copy(update={"laws": ("hill",)})},
        {"profile": recipe.profile.model_copy(update={"channel": "340"})},
    ):
        ids.add(
            type(recipe)(
                **{**{f: getattr(recipe, f) for f in recipe.__dataclass_fields__}, **changed}
            ).recipe_id
        )
    assert len(ids) == 7
    assert tiny_recipe().recipe_id in ids


def test_a_changed_or_foreign_recipe_is_refused(tmp_path):
    site, recipe = empty_site(tmp_path), tiny_recipe()
    with pytest.raises(SiteError, match="is missing"):
        read_recipe(site, recipe.recipe_id)
    keep_recipe(site, recipe)
    path = recipe_path(site, recipe.recipe_id)
    path.chmod(0o644)
    path.write_text(path.read_text().replace("0.1", "0.3"))
    with pytest.raises(SiteError, match="has changed"):
        read_recipe(site, recipe.recipe_id)
    document = json.loads(recipe.canonical)
    document["assay"]["from_the_future"] = 1
    foreign = json.dumps(document).encode()
    recipe_path(site, content_id(foreign)).write_bytes(foreign)
    with pytest.raises(SiteError, match="cannot be used by this version"):
        read_recipe(site, content_id(foreign))


def test_the_code_version_changes_with_any_source_file(tmp_path):
    assert code_version() == code_version()
    assert len(code_version().rpartition("+")[2]) == 12
    package = tmp_path / "models"
    (package / "deep").mkdir(parents=True)
    (package / "deep" / "a.py").write_text("x = 1\n")
    seen = [source_digest([package])]
    (package / "deep" / "a.py").write_text("x = 2\n")
    seen.append(source_digest([package]))
    (package / "deep" / "a.py").rename(package / "a.py")
    seen.append(source_digest([package]))
    (package / "notes.md").write_text("no code\n")
    assert source_digest([package]) == seen[-1]
    assert len(set(seen)) == 3
