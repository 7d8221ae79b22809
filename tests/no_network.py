"""A watch on sockets: the kernel ends any process that opens one beyond this machine.

Libraries in C open sockets without Python's knowledge, so the watch is a filter of system
calls (seccomp(2), "from memory" for the layout of the program), inherited by children.
"""

from __future__ import annotations

import ctypes
import platform
import struct

# Audit numbers of the architectures and their numbers for socket(2), linux/audit.h.
ARCHITECTURES = {"x86_64": (0xC000003E, 41), "aarch64": (0xC00000B7, 198)}
LOAD, JUMP_IF_EQUAL, RETURN = 0x20, 0x15, 0x06
ALLOW, KILL = 0x7FFF0000, 0x80000000
LOCAL = 1
NO_NEW_PRIVILEGES, SET_SECCOMP, FILTER = 38, 22, 2


class _Program(ctypes.Structure):
    _fields_ = (("length", ctypes.c_ushort), ("code", ctypes.c_void_p))


def forbid() -> bool:
    """Let the kernel end this process on a socket that is not local; tell if it will."""
    if platform.machine() not in ARCHITECTURES:
        return False
    audit, call = ARCHITECTURES[platform.machine()]
    steps = [
        (LOAD, 0, 0, 4),
        (JUMP_IF_EQUAL, 0, 4, audit),
        (LOAD, 0, 0, 0),
        (JUMP_IF_EQUAL, 0, 2, call),
        (LOAD, 0, 0, 16),
        (JUMP_IF_EQUAL, 0, 1, LOCAL),
        (RETURN, 0, 0, ALLOW),
        (RETURN, 0, 0, KILL),
    ]
    code = ctypes.create_string_buffer(b"".join(struct.pack("<HBBI", *step) for step in steps))
    program = _Program(len(steps), ctypes.addressof(code))
    system = ctypes.CDLL(None, use_errno=True)
    if system.prctl(NO_NEW_PRIVILEGES, 1, 0, 0, 0):
        return False
    return system.prctl(SET_SECCOMP, FILTER, ctypes.byref(program), 0, 0) == 0


if __name__ == "__main__":
    import runpy
    import sys

    if not forbid():
        sys.exit(77)
    sys.argv = sys.argv[1:]
    runpy.run_path(sys.argv[0], run_name="__main__")
