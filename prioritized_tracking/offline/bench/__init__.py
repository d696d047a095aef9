# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
How fast the control law is, part by part, and against what it should be measured.

"""
