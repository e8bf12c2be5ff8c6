"""One finished small study, made once; every test works on a copy of its own."""

import shutil

import pytest

import small_study


@pytest.fixture(scope="session")
def finished_study(tmp_path_factory):
    study_dir = small_study.make_study(tmp_path_factory.mktemp("finished") / "study")
    run = small_study.snakemake(study_dir)
    assert run.code == 0, run.text
    return study_dir


@pytest.fixture
def study(finished_study, tmp_path):
    """A copy of the finished study in another place, with its dates."""
    return shutil.copytree(finished_study, tmp_path / "my study", symlinks=True)
