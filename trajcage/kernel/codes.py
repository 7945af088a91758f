"""What a kernel answers beside its numbers; plain integers for compiled code."""

__all__ = [
    "BORDER",
    "CLOSED",
    "INVALID",
    "NEED_CAPACITY",
    "NEED_HALO",
    "OPEN",
    "OVERLAP",
    "WRAPPED",
]

# final answers, the same numbers as trajcage.model.CageStatus
CLOSED = 0
OPEN = 1
BORDER = 2
OVERLAP = 3
INVALID = 4
WRAPPED = 5

# requests to the driver: more room in the scratch arrays, a wider halo of images
NEED_CAPACITY = 10
NEED_HALO = 11
