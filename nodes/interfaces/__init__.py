"""nipype interfaces: each run step is load, one call, save.

Beside its ports, each class declares its touch rules (which input elements each output element
derives from) and, where it has one, its meeting or its statistic.
"""

from .comparisons import CompareFixed, CompareHeldOut
from .foldlists import FoldLists, HeldOutSummary, MasksByRow
from .groupmaps import GroupMap, LeaveOutMaps
from .images import SubjectMaps
from .masks import ChooseEach, ChooseMask, GivenMask, SphereMask
from .parcels import ExtractParcels, FamilyTest
from .procedure import ChooseByFold, ChooseWithin, FlipTest
from .regions import CombineMasks, ErodeMask, LabelMask, MirrorMask, RegridLabels
from .roi import Extract, FixedRegionTest
from .subjects import KeepSubjects

__all__ = [
    "ChooseByFold",
    "ChooseEach",
    "ChooseMask",
    "ChooseWithin",
    "CombineMasks",
    "CompareFixed",
    "CompareHeldOut",
    "ErodeMask",
    "Extract",
    "ExtractParcels",
    "FamilyTest",
    "FixedRegionTest",
    "FlipTest",
    "FoldLists",
    "GivenMask",
    "GroupMap",
    "HeldOutSummary",
    "KeepSubjects",
    "LabelMask",
    "LeaveOutMaps",
    "MasksByRow",
    "MirrorMask",
    "RegridLabels",
    "SphereMask",
    "SubjectMaps",
]
