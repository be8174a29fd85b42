"""Message definitions for reading and writing bags without ROS: the standard ones and ours."""

from __future__ import annotations

import os
from functools import cache

from rosbags.typesys import Stores, get_types_from_msg, get_typestore
from rosbags.typesys.store import Typestore

from .resources import PACKAGE, shipped

_STORES = {"jazzy": Stores.ROS2_JAZZY, "kilted": Stores.ROS2_KILTED}


@cache
def typestore() -> Typestore:
    """All message types of the ROS 2 release in use (Jazzy where none is) and of this package."""
    release = os.environ.get("ROS_DISTRO", "")
    store = get_typestore(_STORES.get(release, Stores.ROS2_JAZZY))
    types = {}
    for path in sorted(shipped("msg").glob("*.msg")):
        types.update(get_types_from_msg(path.read_text(), f"{PACKAGE}/msg/{path.stem}"))
    store.register(types)
    return store
