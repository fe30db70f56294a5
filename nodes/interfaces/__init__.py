"""nipype interfaces: each run step is load, one call, save.

Beside its ports, each class declares its touch rules (which input elements each output element
derives from) and, where it has one, its meeting or its statistic.
"""

from .groupmaps import GroupMap, LeaveOutMaps
from .images import SubjectMaps
from .masks import ChooseMask, GivenMask, SphereMask
from .procedure import ChooseByFold, ChooseWithin, FlipTest
from .roi import Extract, FixedRegionTest

__all__ = [
    "ChooseByFold",
    "ChooseMask",
    "ChooseWithin",
    "Extract",
    "FixedRegionTest",
    "FlipTest",
    "GivenMask",
    "GroupMap",
    "LeaveOutMaps",
    "SphereMask",
    "SubjectMaps",
]
