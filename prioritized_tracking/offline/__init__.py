# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Work before and after the run: companions, rehearsals, reports.

"""
