"""Two test processes share two cores: each does its linear algebra on one thread.

Threads that wait for each other by spinning made small products a hundred times slower. It has to
be said before NumPy is imported.
"""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
