"""One demo area for all tests that only read it."""

import pytest

from firnlight.demo.area import write_demo


@pytest.fixture(scope="session")
def made(tmp_path_factory):
    folder = tmp_path_factory.mktemp("morrowfell")
    write_demo(folder, size=192)
    return folder
