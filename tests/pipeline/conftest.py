"""Shared by the tests of the pipeline."""

import pytest

from volmap.pipeline import reporting


@pytest.fixture(scope="module")
def without_report():
    """Leave the page out where it is not what is tested: drawing takes longer than mapping a small pair."""

    def call(function, *arguments, **options):
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(reporting, "report_of", lambda *_, **__: "<!DOCTYPE html>\n")
            return function(*arguments, **options)

    return call
