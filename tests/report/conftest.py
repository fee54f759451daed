"""Pages written once for the tests of this folder, from made-up results."""

from __future__ import annotations

import factory
import pytest

from twicetold.report import write_pages


@pytest.fixture(scope="session")
def rich():
    return factory.make_ranking()


@pytest.fixture(scope="session")
def bare():
    return factory.make_ranking(motifs=12, rich=False)


@pytest.fixture(scope="session")
def pages(rich, tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages") / "run"
    write_pages(rich, folder, command=factory.COMMAND)
    return folder


@pytest.fixture(scope="session")
def bare_pages(bare, tmp_path_factory):
    folder = tmp_path_factory.mktemp("bare") / "run"
    write_pages(bare, folder, command=factory.COMMAND)
    return folder
