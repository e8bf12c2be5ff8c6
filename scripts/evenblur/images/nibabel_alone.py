"""Load nibabel without pydicom: it takes it along where it is installed, a quarter of a second that few jobs need.

What nibabel would do with it is to read DICOM headers inside NIfTI files, which this program leaves closed.
"""

import sys
from typing import Any, cast

__all__ = ["nib"]

_not_loaded = "pydicom" not in sys.modules
if _not_loaded:
    cast(dict[str, Any], sys.modules)["pydicom"] = None  # to the import system: not there
try:
    import nibabel as nib
finally:
    if _not_loaded:
        del sys.modules["pydicom"]
