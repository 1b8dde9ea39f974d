"""The sample project, run once for all tests that only look at its results."""

import pytest

from basinwright import pipeline


@pytest.fixture(scope="session")
def sample_run(tmp_path_factory):
    """Run the sample without the audit; return the outcome. Nobody may write into its folder."""
    file = pipeline.copy_sample(tmp_path_factory.mktemp("county"))
    text = file.read_text(encoding="utf-8")
    file.write_text(text.replace('second_opinion = "all"', 'second_opinion = "none"'), encoding="utf-8")
    return pipeline.run(file)


@pytest.fixture(scope="session")
def sample(sample_run):
    """Return the folder of the sample's run."""
    return sample_run.folder
