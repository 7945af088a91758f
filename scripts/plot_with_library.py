"""Free volume of every particle against its local packing, with the library.

python scripts/plot_with_library.py cages.h5 crowding.png
"""

import sys

from matplotlib import pyplot as plt

import trajcage

with trajcage.open_result(sys.argv[1]) as result:
    room, crowding = result["free_volume"][-1], result["local_packing_fraction"][-1]
plt.semilogy(crowding, room, ".")
plt.xlabel("local packing fraction")
plt.ylabel("free volume")
plt.savefig(sys.argv[2])
