"""Loop Workbench: from a bump-test record to controller settings an engineer can defend."""

import os

__version__ = "0.1.0"

# The matrices here are small: a second thread of numpy's linear algebra only waits for the first,
# for milliseconds where the machine is busy.  It reads this when it is first imported.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
