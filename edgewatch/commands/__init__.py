"""The commands: one small module each; only these print."""

import os

# Products of matrices are small here: waking a second thread costs more than it saves. Set before numpy is loaded.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ.setdefault(_name, "1")
