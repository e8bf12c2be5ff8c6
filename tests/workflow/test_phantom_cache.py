"""A phantom that was changed and changed back is not measured a second time, where a closed cache is asked for."""

import pytest

import small_study as small

pytestmark = pytest.mark.slow

RECORD = "results/resolution/quay-1-points.json"
LOG = ".evenblur/logs/measure_resolution/quay-1-points.log"
FROM_CACHE = "Measured before"


@pytest.fixture
def cache(tmp_path, monkeypatch):
    """A folder for the cache, named as Snakemake's own is."""
    folder = tmp_path / "cache"
    folder.mkdir(mode=0o700)
    monkeypatch.setenv("SNAKEMAKE_OUTPUT_CACHE", str(folder))
    return folder


@pytest.fixture
def fresh_study(tmp_path):
    return small.make_study(tmp_path / "study")


def plan(study_dir, *arguments):
    """Take in and measure, no more."""
    run = small.snakemake(study_dir, "plan", "--cache", *arguments)
    assert run.code == 0, run.text
    return {job for job in run.jobs if job.startswith("Measure phantom")}


def entries(cache):
    return {path.name for path in cache.iterdir()}


@pytest.mark.parametrize("named", [(), ("measure_resolution",)])
def test_a_phantom_changed_and_changed_back_is_measured_twice_not_thrice(fresh_study, cache, named):
    plan(fresh_study, *named)
    first, record = entries(cache), (fresh_study / RECORD).read_bytes()
    assert len(first) == 3
    image = fresh_study / "images" / "quay-1.nii.gz"
    small.save(image, small.phantom_volume("quay-1", widen=0.5))
    plan(fresh_study, *named)
    both = entries(cache)
    assert len(both - first) == 1
    assert (fresh_study / RECORD).read_bytes() != record
    assert FROM_CACHE not in (fresh_study / LOG).read_text()
    small.save(image, small.phantom_volume("quay-1"))
    assert plan(fresh_study, *named) == {"Measure phantom quay-1-points of setup quay-1"}
    assert FROM_CACHE in (fresh_study / LOG).read_text()
    assert entries(cache) == both
    assert (fresh_study / RECORD).read_bytes() == record
    # The results hold copies: they outlive the cache and do not point out of the study.
    assert not (fresh_study / RECORD).is_symlink()


def test_another_study_takes_a_measurement_over_under_its_own_names(fresh_study, cache, tmp_path):
    plan(fresh_study)
    other = small.make_study(tmp_path / "other")
    table = other / "config" / "phantoms.tsv"
    table.write_text(table.read_text().replace("quay-1-points", "sources"))
    plan(other)
    assert len(entries(cache)) == 3
    here = (fresh_study / RECORD).read_text().replace("quay-1-points", "sources")
    assert (other / "results/resolution/sources.json").read_text() == here


def test_a_damaged_entry_is_measured_again(fresh_study, cache):
    plan(fresh_study)
    record = (fresh_study / RECORD).read_bytes()
    for path in cache.iterdir():
        path.write_text(path.read_text().replace('"fwhm_mm": ', '"fwhm_mm": 1'))
    (fresh_study / RECORD).unlink()
    plan(fresh_study)
    assert FROM_CACHE not in (fresh_study / LOG).read_text()
    assert (fresh_study / RECORD).read_bytes() == record


@pytest.mark.parametrize("mode", [0o750, 0o705, 0o777])
def test_a_cache_that_others_may_enter_is_refused_in_one_line(fresh_study, cache, mode):
    cache.chmod(mode)
    run = small.snakemake(fresh_study, "plan", "--cache")
    assert (run.code, run.jobs) == (2, frozenset())
    assert [line for line in run.text.splitlines() if "open to other users" in line and "chmod go-rwx" in line]
    assert "Traceback" not in run.text


def test_subjects_images_are_never_kept(fresh_study, cache):
    run = small.snakemake(fresh_study, "--cache", "smooth_scan")
    assert (run.code, run.jobs) == (2, frozenset())
    assert "only measurements of phantoms may be kept" in run.text


def test_nothing_is_kept_where_nobody_asks(fresh_study, cache):
    assert small.snakemake(fresh_study, "plan").code == 0
    assert list(cache.iterdir()) == []
