"""What every test needs to be as the service is."""

import os

# As the server sets it: one calculation, one processor. Threads of the linear algebra would only wait on each
# other, and make times depend on whatever else the machine does.
for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ.setdefault(name, "1")
