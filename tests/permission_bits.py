"""A superuser's passes given up, so that permission bits hold in a test as they do for anybody (Linux)."""

import ctypes
import os

PR_CAPBSET_DROP, CAP_DAC_OVERRIDE, CAP_DAC_READ_SEARCH = 24, 1, 2
"""linux/prctl.h and linux/capability.h: what lets a superuser pass over permission bits."""
VERSION_3 = 0x20080522
"""_LINUX_CAPABILITY_VERSION_3: a header of two numbers, then effective, permitted and inheritable, twice."""


def _tried(result: int) -> None:
    if result != 0:
        raise OSError(ctypes.get_errno(), "a capability could not be given up")


def heed_permission_bits() -> None:
    """In a child process, for itself and for what it starts; files stay its own, so no folder is out of reach."""
    if os.getuid() != 0:
        return
    libc = ctypes.CDLL(None, use_errno=True)
    for capability in (CAP_DAC_OVERRIDE, CAP_DAC_READ_SEARCH):
        _tried(libc.prctl(PR_CAPBSET_DROP, capability, 0, 0, 0))
    header, sets = (ctypes.c_uint32 * 2)(VERSION_3, 0), (ctypes.c_uint32 * 6)()
    _tried(libc.capget(header, sets))
    for each in range(3):
        sets[each] &= ~(1 << CAP_DAC_OVERRIDE | 1 << CAP_DAC_READ_SEARCH)
    _tried(libc.capset(header, sets))
