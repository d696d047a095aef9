# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
