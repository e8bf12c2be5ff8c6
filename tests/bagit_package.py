"""The package `bagit` as a judge of our bags: it needs a helper that present-day setuptools no longer bring."""

import importlib
import importlib.metadata
import sys
import types
import warnings


def load_bagit():
    """Import `bagit`, with a stand-in for the two names of `pkg_resources` that it asks its own version of."""
    if "bagit" in sys.modules:
        return sys.modules["bagit"]
    helper = types.ModuleType("pkg_resources")
    helper.DistributionNotFound = importlib.metadata.PackageNotFoundError
    helper.get_distribution = importlib.metadata.distribution
    before = sys.modules.get("pkg_resources")
    sys.modules["pkg_resources"] = helper
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return importlib.import_module("bagit")
    finally:
        del sys.modules["pkg_resources"]
        if before is not None:
            sys.modules["pkg_resources"] = before


def validate(folder):
    """Let `bagit` validate a bag: completeness, every hash, the Oxum; raises its own error."""
    bagit = load_bagit()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the package counts substitutions in a way that newer Pythons deprecate
        return bagit.Bag(str(folder)).validate()
