"""Shared settings of the tests."""

from hypothesis import settings

from geofractal.versions import show_versions

# The first example of a kernel's test compiles it, so examples have no deadline of their own.
settings.register_profile("geofractal", deadline=None, derandomize=True, max_examples=60)
settings.load_profile("geofractal")


def pytest_report_header():
    return [f"{name} {version}" for name, version in show_versions().items()]
