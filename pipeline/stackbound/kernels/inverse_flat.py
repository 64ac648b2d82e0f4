"""Inverse cosine passes: whole numbers in float64, each pass rounded half to even and so exact.

Written by `stackbound.kernels.flatten`; do not edit.
"""
# fmt: off

from typing import Any

import numpy as np

from stackbound.kernels.jit import kernel

LANES = 16
# cos(k pi / 64), times 2**14 and rounded
C1 = 16364.0
C2 = 16305.0
C3 = 16207.0
C4 = 16069.0
C5 = 15893.0
C6 = 15679.0
C7 = 15426.0
C8 = 15137.0
C9 = 14811.0
C10 = 14449.0
C11 = 14053.0
C12 = 13623.0
C13 = 13160.0
C14 = 12665.0
C15 = 12140.0
C16 = 11585.0
C17 = 11003.0
C18 = 10394.0
C19 = 9760.0
C20 = 9102.0
C21 = 8423.0
C22 = 7723.0
C23 = 7005.0
C24 = 6270.0
C25 = 5520.0
C26 = 4756.0
C27 = 3981.0
C28 = 3196.0
C29 = 2404.0
C30 = 1606.0
C31 = 804.0
# Adding and subtracting 1.5 * 2**52 rounds a float64 of magnitude below 2**51 to a whole number.
ROUND = 6755399441055744.0


@kernel
def inverse_2(data: Any) -> None:
    """Transform length 2 along the middle axis, in place."""
    source = np.empty((2, LANES), np.float64)
    target = np.empty((2, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(2):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * 6.103515625e-05
            for k in range(LANES):
                x0 = source[0, k]
                x1 = source[1, k]
                e2_0 = x0 * C16
                o2_0 = x1 * C16
                target[0, k] = e2_0 + o2_0
                target[1, k] = e2_0 - o2_0
            for i in range(2):
                for k in range(LANES):
                    data[o, i, j + k] = (target[i, k] + ROUND) - ROUND


@kernel
def inverse_4(data: Any) -> None:
    """Transform length 4 along the middle axis, in place."""
    source = np.empty((4, LANES), np.float64)
    target = np.empty((4, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(4):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * 6.103515625e-05
            for k in range(LANES):
                x0 = source[0, k]
                x1 = source[1, k]
                x2 = source[2, k]
                x3 = source[3, k]
                e2_0 = x0 * C16
                o2_0 = x2 * C16
                e4_0 = e2_0 + o2_0
                e4_1 = e2_0 - o2_0
                o4_0 = x1 * C8 + x3 * C24
                o4_1 = x1 * C24 - x3 * C8
                target[0, k] = e4_0 + o4_0
                target[3, k] = e4_0 - o4_0
                target[1, k] = e4_1 + o4_1
                target[2, k] = e4_1 - o4_1
            for i in range(4):
                for k in range(LANES):
                    data[o, i, j + k] = (target[i, k] + ROUND) - ROUND


@kernel
def inverse_8(data: Any) -> None:
    """Transform length 8 along the middle axis, in place."""
    source = np.empty((8, LANES), np.float64)
    target = np.empty((8, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(8):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * 6.103515625e-05
            for k in range(LANES):
                x0 = source[0, k]
                x1 = source[1, k]
                x2 = source[2, k]
                x3 = source[3, k]
                x4 = source[4, k]
                x5 = source[5, k]
                x6 = source[6, k]
                x7 = source[7, k]
                e2_0 = x0 * C16
                o2_0 = x4 * C16
                e4_0 = e2_0 + o2_0
                e4_1 = e2_0 - o2_0
                o4_0 = x2 * C8 + x6 * C24
                o4_1 = x2 * C24 - x6 * C8
                e8_0 = e4_0 + o4_0
                e8_3 = e4_0 - o4_0
                e8_1 = e4_1 + o4_1
                e8_2 = e4_1 - o4_1
                o8_0 = x1 * C4 + x3 * C12 + x5 * C20 + x7 * C28
                o8_1 = x1 * C12 - x3 * C28 - x5 * C4 - x7 * C20
                o8_2 = x1 * C20 - x3 * C4 + x5 * C28 + x7 * C12
                o8_3 = x1 * C28 - x3 * C20 + x5 * C12 - x7 * C4
                target[0, k] = e8_0 + o8_0
                target[7, k] = e8_0 - o8_0
                target[1, k] = e8_1 + o8_1
                target[6, k] = e8_1 - o8_1
                target[2, k] = e8_2 + o8_2
                target[5, k] = e8_2 - o8_2
                target[3, k] = e8_3 + o8_3
                target[4, k] = e8_3 - o8_3
            for i in range(8):
                for k in range(LANES):
                    data[o, i, j + k] = (target[i, k] + ROUND) - ROUND


@kernel
def inverse_16(data: Any) -> None:
    """Transform length 16 along the middle axis, in place."""
    source = np.empty((16, LANES), np.float64)
    target = np.empty((16, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(16):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * 6.103515625e-05
            for k in range(LANES):
                x0 = source[0, k]
                x1 = source[1, k]
                x2 = source[2, k]
                x3 = source[3, k]
                x4 = source[4, k]
                x5 = source[5, k]
                x6 = source[6, k]
                x7 = source[7, k]
                x8 = source[8, k]
                x9 = source[9, k]
                x10 = source[10, k]
                x11 = source[11, k]
                x12 = source[12, k]
                x13 = source[13, k]
                x14 = source[14, k]
                x15 = source[15, k]
                e2_0 = x0 * C16
                o2_0 = x8 * C16
                e4_0 = e2_0 + o2_0
                e4_1 = e2_0 - o2_0
                o4_0 = x4 * C8 + x12 * C24
                o4_1 = x4 * C24 - x12 * C8
                e8_0 = e4_0 + o4_0
                e8_3 = e4_0 - o4_0
                e8_1 = e4_1 + o4_1
                e8_2 = e4_1 - o4_1
                o8_0 = x2 * C4 + x6 * C12 + x10 * C20 + x14 * C28
                o8_1 = x2 * C12 - x6 * C28 - x10 * C4 - x14 * C20
                o8_2 = x2 * C20 - x6 * C4 + x10 * C28 + x14 * C12
                o8_3 = x2 * C28 - x6 * C20 + x10 * C12 - x14 * C4
                e16_0 = e8_0 + o8_0
                e16_7 = e8_0 - o8_0
                e16_1 = e8_1 + o8_1
                e16_6 = e8_1 - o8_1
                e16_2 = e8_2 + o8_2
                e16_5 = e8_2 - o8_2
                e16_3 = e8_3 + o8_3
                e16_4 = e8_3 - o8_3
                o16_0 = x1 * C2 + x3 * C6 + x5 * C10 + x7 * C14 + x9 * C18
                o16_0 = o16_0 + x11 * C22 + x13 * C26 + x15 * C30
                o16_1 = x1 * C6 + x3 * C18 + x5 * C30 - x7 * C22 - x9 * C10
                o16_1 = o16_1 - x11 * C2 - x13 * C14 - x15 * C26
                o16_2 = x1 * C10 + x3 * C30 - x5 * C14 - x7 * C6 - x9 * C26
                o16_2 = o16_2 + x11 * C18 + x13 * C2 + x15 * C22
                o16_3 = x1 * C14 - x3 * C22 - x5 * C6 + x7 * C30 + x9 * C2
                o16_3 = o16_3 + x11 * C26 - x13 * C10 - x15 * C18
                o16_4 = x1 * C18 - x3 * C10 - x5 * C26 + x7 * C2 - x9 * C30
                o16_4 = o16_4 - x11 * C6 + x13 * C22 + x15 * C14
                o16_5 = x1 * C22 - x3 * C2 + x5 * C18 + x7 * C26 - x9 * C6
                o16_5 = o16_5 + x11 * C14 + x13 * C30 - x15 * C10
                o16_6 = x1 * C26 - x3 * C14 + x5 * C2 - x7 * C10 + x9 * C22
                o16_6 = o16_6 + x11 * C30 - x13 * C18 + x15 * C6
                o16_7 = x1 * C30 - x3 * C26 + x5 * C22 - x7 * C18 + x9 * C14
                o16_7 = o16_7 - x11 * C10 + x13 * C6 - x15 * C2
                target[0, k] = e16_0 + o16_0
                target[15, k] = e16_0 - o16_0
                target[1, k] = e16_1 + o16_1
                target[14, k] = e16_1 - o16_1
                target[2, k] = e16_2 + o16_2
                target[13, k] = e16_2 - o16_2
                target[3, k] = e16_3 + o16_3
                target[12, k] = e16_3 - o16_3
                target[4, k] = e16_4 + o16_4
                target[11, k] = e16_4 - o16_4
                target[5, k] = e16_5 + o16_5
                target[10, k] = e16_5 - o16_5
                target[6, k] = e16_6 + o16_6
                target[9, k] = e16_6 - o16_6
                target[7, k] = e16_7 + o16_7
                target[8, k] = e16_7 - o16_7
            for i in range(16):
                for k in range(LANES):
                    data[o, i, j + k] = (target[i, k] + ROUND) - ROUND


@kernel
def inverse_32(data: Any) -> None:
    """Transform length 32 along the middle axis, in place."""
    source = np.empty((32, LANES), np.float64)
    target = np.empty((32, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(32):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * 6.103515625e-05
            for k in range(LANES):
                x0 = source[0, k]
                x1 = source[1, k]
                x2 = source[2, k]
                x3 = source[3, k]
                x4 = source[4, k]
                x5 = source[5, k]
                x6 = source[6, k]
                x7 = source[7, k]
                x8 = source[8, k]
                x9 = source[9, k]
                x10 = source[10, k]
                x11 = source[11, k]
                x12 = source[12, k]
                x13 = source[13, k]
                x14 = source[14, k]
                x15 = source[15, k]
                x16 = source[16, k]
                x17 = source[17, k]
                x18 = source[18, k]
                x19 = source[19, k]
                x20 = source[20, k]
                x21 = source[21, k]
                x22 = source[22, k]
                x23 = source[23, k]
                x24 = source[24, k]
                x25 = source[25, k]
                x26 = source[26, k]
                x27 = source[27, k]
                x28 = source[28, k]
                x29 = source[29, k]
                x30 = source[30, k]
                x31 = source[31, k]
                e2_0 = x0 * C16
                o2_0 = x16 * C16
                e4_0 = e2_0 + o2_0
                e4_1 = e2_0 - o2_0
                o4_0 = x8 * C8 + x24 * C24
                o4_1 = x8 * C24 - x24 * C8
                e8_0 = e4_0 + o4_0
                e8_3 = e4_0 - o4_0
                e8_1 = e4_1 + o4_1
                e8_2 = e4_1 - o4_1
                o8_0 = x4 * C4 + x12 * C12 + x20 * C20 + x28 * C28
                o8_1 = x4 * C12 - x12 * C28 - x20 * C4 - x28 * C20
                o8_2 = x4 * C20 - x12 * C4 + x20 * C28 + x28 * C12
                o8_3 = x4 * C28 - x12 * C20 + x20 * C12 - x28 * C4
                e16_0 = e8_0 + o8_0
                e16_7 = e8_0 - o8_0
                e16_1 = e8_1 + o8_1
                e16_6 = e8_1 - o8_1
                e16_2 = e8_2 + o8_2
                e16_5 = e8_2 - o8_2
                e16_3 = e8_3 + o8_3
                e16_4 = e8_3 - o8_3
                o16_0 = x2 * C2 + x6 * C6 + x10 * C10 + x14 * C14 + x18 * C18
                o16_0 = o16_0 + x22 * C22 + x26 * C26 + x30 * C30
                o16_1 = x2 * C6 + x6 * C18 + x10 * C30 - x14 * C22 - x18 * C10
                o16_1 = o16_1 - x22 * C2 - x26 * C14 - x30 * C26
                o16_2 = x2 * C10 + x6 * C30 - x10 * C14 - x14 * C6 - x18 * C26
                o16_2 = o16_2 + x22 * C18 + x26 * C2 + x30 * C22
                o16_3 = x2 * C14 - x6 * C22 - x10 * C6 + x14 * C30 + x18 * C2
                o16_3 = o16_3 + x22 * C26 - x26 * C10 - x30 * C18
                o16_4 = x2 * C18 - x6 * C10 - x10 * C26 + x14 * C2 - x18 * C30
                o16_4 = o16_4 - x22 * C6 + x26 * C22 + x30 * C14
                o16_5 = x2 * C22 - x6 * C2 + x10 * C18 + x14 * C26 - x18 * C6
                o16_5 = o16_5 + x22 * C14 + x26 * C30 - x30 * C10
                o16_6 = x2 * C26 - x6 * C14 + x10 * C2 - x14 * C10 + x18 * C22
                o16_6 = o16_6 + x22 * C30 - x26 * C18 + x30 * C6
                o16_7 = x2 * C30 - x6 * C26 + x10 * C22 - x14 * C18 + x18 * C14
                o16_7 = o16_7 - x22 * C10 + x26 * C6 - x30 * C2
                e32_0 = e16_0 + o16_0
                e32_15 = e16_0 - o16_0
                e32_1 = e16_1 + o16_1
                e32_14 = e16_1 - o16_1
                e32_2 = e16_2 + o16_2
                e32_13 = e16_2 - o16_2
                e32_3 = e16_3 + o16_3
                e32_12 = e16_3 - o16_3
                e32_4 = e16_4 + o16_4
                e32_11 = e16_4 - o16_4
                e32_5 = e16_5 + o16_5
                e32_10 = e16_5 - o16_5
                e32_6 = e16_6 + o16_6
                e32_9 = e16_6 - o16_6
                e32_7 = e16_7 + o16_7
                e32_8 = e16_7 - o16_7
                o32_0 = x1 * C1 + x3 * C3 + x5 * C5 + x7 * C7 + x9 * C9
                o32_0 = o32_0 + x11 * C11 + x13 * C13 + x15 * C15 + x17 * C17 + x19 * C19
                o32_0 = o32_0 + x21 * C21 + x23 * C23 + x25 * C25 + x27 * C27 + x29 * C29
                o32_0 = o32_0 + x31 * C31
                o32_1 = x1 * C3 + x3 * C9 + x5 * C15 + x7 * C21 + x9 * C27
                o32_1 = o32_1 - x11 * C31 - x13 * C25 - x15 * C19 - x17 * C13 - x19 * C7
                o32_1 = o32_1 - x21 * C1 - x23 * C5 - x25 * C11 - x27 * C17 - x29 * C23
                o32_1 = o32_1 - x31 * C29
                o32_2 = x1 * C5 + x3 * C15 + x5 * C25 - x7 * C29 - x9 * C19
                o32_2 = o32_2 - x11 * C9 - x13 * C1 - x15 * C11 - x17 * C21 - x19 * C31
                o32_2 = o32_2 + x21 * C23 + x23 * C13 + x25 * C3 + x27 * C7 + x29 * C17
                o32_2 = o32_2 + x31 * C27
                o32_3 = x1 * C7 + x3 * C21 - x5 * C29 - x7 * C15 - x9 * C1
                o32_3 = o32_3 - x11 * C13 - x13 * C27 + x15 * C23 + x17 * C9 + x19 * C5
                o32_3 = o32_3 + x21 * C19 - x23 * C31 - x25 * C17 - x27 * C3 - x29 * C11
                o32_3 = o32_3 - x31 * C25
                o32_4 = x1 * C9 + x3 * C27 - x5 * C19 - x7 * C1 - x9 * C17
                o32_4 = o32_4 + x11 * C29 + x13 * C11 + x15 * C7 + x17 * C25 - x19 * C21
                o32_4 = o32_4 - x21 * C3 - x23 * C15 + x25 * C31 + x27 * C13 + x29 * C5
                o32_4 = o32_4 + x31 * C23
                o32_5 = x1 * C11 - x3 * C31 - x5 * C9 - x7 * C13 + x9 * C29
                o32_5 = o32_5 + x11 * C7 + x13 * C15 - x15 * C27 - x17 * C5 - x19 * C17
                o32_5 = o32_5 + x21 * C25 + x23 * C3 + x25 * C19 - x27 * C23 - x29 * C1
                o32_5 = o32_5 - x31 * C21
                o32_6 = x1 * C13 - x3 * C25 - x5 * C1 - x7 * C27 + x9 * C11
                o32_6 = o32_6 + x11 * C15 - x13 * C23 - x15 * C3 - x17 * C29 + x19 * C9
                o32_6 = o32_6 + x21 * C17 - x23 * C21 - x25 * C5 - x27 * C31 + x29 * C7
                o32_6 = o32_6 + x31 * C19
                o32_7 = x1 * C15 - x3 * C19 - x5 * C11 + x7 * C23 + x9 * C7
                o32_7 = o32_7 - x11 * C27 - x13 * C3 + x15 * C31 + x17 * C1 + x19 * C29
                o32_7 = o32_7 - x21 * C5 - x23 * C25 + x25 * C9 + x27 * C21 - x29 * C13
                o32_7 = o32_7 - x31 * C17
                o32_8 = x1 * C17 - x3 * C13 - x5 * C21 + x7 * C9 + x9 * C25
                o32_8 = o32_8 - x11 * C5 - x13 * C29 + x15 * C1 - x17 * C31 - x19 * C3
                o32_8 = o32_8 + x21 * C27 + x23 * C7 - x25 * C23 - x27 * C11 + x29 * C19
                o32_8 = o32_8 + x31 * C15
                o32_9 = x1 * C19 - x3 * C7 - x5 * C31 + x7 * C5 - x9 * C21
                o32_9 = o32_9 - x11 * C17 + x13 * C9 + x15 * C29 - x17 * C3 + x19 * C23
                o32_9 = o32_9 + x21 * C15 - x23 * C11 - x25 * C27 + x27 * C1 - x29 * C25
                o32_9 = o32_9 - x31 * C13
                o32_10 = x1 * C21 - x3 * C1 + x5 * C23 + x7 * C19 - x9 * C3
                o32_10 = o32_10 + x11 * C25 + x13 * C17 - x15 * C5 + x17 * C27 + x19 * C15
                o32_10 = o32_10 - x21 * C7 + x23 * C29 + x25 * C13 - x27 * C9 + x29 * C31
                o32_10 = o32_10 + x31 * C11
                o32_11 = x1 * C23 - x3 * C5 + x5 * C13 - x7 * C31 - x9 * C15
                o32_11 = o32_11 + x11 * C3 - x13 * C21 - x15 * C25 + x17 * C7 - x19 * C11
                o32_11 = o32_11 + x21 * C29 + x23 * C17 - x25 * C1 + x27 * C19 + x29 * C27
                o32_11 = o32_11 - x31 * C9
                o32_12 = x1 * C25 - x3 * C11 + x5 * C3 - x7 * C17 + x9 * C31
                o32_12 = o32_12 + x11 * C19 - x13 * C5 + x15 * C9 - x17 * C23 - x19 * C27
                o32_12 = o32_12 + x21 * C13 - x23 * C1 + x25 * C15 - x27 * C29 - x29 * C21
                o32_12 = o32_12 + x31 * C7
                o32_13 = x1 * C27 - x3 * C17 + x5 * C7 - x7 * C3 + x9 * C13
                o32_13 = o32_13 - x11 * C23 - x13 * C31 + x15 * C21 - x17 * C11 + x19 * C1
                o32_13 = o32_13 - x21 * C9 + x23 * C19 - x25 * C29 - x27 * C25 + x29 * C15
                o32_13 = o32_13 - x31 * C5
                o32_14 = x1 * C29 - x3 * C23 + x5 * C17 - x7 * C11 + x9 * C5
                o32_14 = o32_14 - x11 * C1 + x13 * C7 - x15 * C13 + x17 * C19 - x19 * C25
                o32_14 = o32_14 + x21 * C31 + x23 * C27 - x25 * C21 + x27 * C15 - x29 * C9
                o32_14 = o32_14 + x31 * C3
                o32_15 = x1 * C31 - x3 * C29 + x5 * C27 - x7 * C25 + x9 * C23
                o32_15 = o32_15 - x11 * C21 + x13 * C19 - x15 * C17 + x17 * C15 - x19 * C13
                o32_15 = o32_15 + x21 * C11 - x23 * C9 + x25 * C7 - x27 * C5 + x29 * C3
                o32_15 = o32_15 - x31 * C1
                target[0, k] = e32_0 + o32_0
                target[31, k] = e32_0 - o32_0
                target[1, k] = e32_1 + o32_1
                target[30, k] = e32_1 - o32_1
                target[2, k] = e32_2 + o32_2
                target[29, k] = e32_2 - o32_2
                target[3, k] = e32_3 + o32_3
                target[28, k] = e32_3 - o32_3
                target[4, k] = e32_4 + o32_4
                target[27, k] = e32_4 - o32_4
                target[5, k] = e32_5 + o32_5
                target[26, k] = e32_5 - o32_5
                target[6, k] = e32_6 + o32_6
                target[25, k] = e32_6 - o32_6
                target[7, k] = e32_7 + o32_7
                target[24, k] = e32_7 - o32_7
                target[8, k] = e32_8 + o32_8
                target[23, k] = e32_8 - o32_8
                target[9, k] = e32_9 + o32_9
                target[22, k] = e32_9 - o32_9
                target[10, k] = e32_10 + o32_10
                target[21, k] = e32_10 - o32_10
                target[11, k] = e32_11 + o32_11
                target[20, k] = e32_11 - o32_11
                target[12, k] = e32_12 + o32_12
                target[19, k] = e32_12 - o32_12
                target[13, k] = e32_13 + o32_13
                target[18, k] = e32_13 - o32_13
                target[14, k] = e32_14 + o32_14
                target[17, k] = e32_14 - o32_14
                target[15, k] = e32_15 + o32_15
                target[16, k] = e32_15 - o32_15
            for i in range(32):
                for k in range(LANES):
                    data[o, i, j + k] = (target[i, k] + ROUND) - ROUND
