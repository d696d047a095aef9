# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
`python -m prioritized_tracking` is the command line.

"""

import sys

from prioritized_tracking.cli import main

if __name__ == "__main__":
    sys.exit(main())
