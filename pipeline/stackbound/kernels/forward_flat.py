"""Forward cosine passes in float32, every operation in the order written here.

Written by `stackbound.kernels.flatten`; do not edit.
"""
# fmt: off

from typing import Any

import numpy as np

from stackbound.kernels.jit import kernel

LANES = 16
# cos(k pi / 64)
C1 = np.float32(0.9987954562051724)
C2 = np.float32(0.9951847266721969)
C3 = np.float32(0.989176509964781)
C4 = np.float32(0.9807852804032304)
C5 = np.float32(0.970031253194544)
C6 = np.float32(0.9569403357322088)
C7 = np.float32(0.9415440651830208)
C8 = np.float32(0.9238795325112867)
C9 = np.float32(0.9039892931234433)
C10 = np.float32(0.881921264348355)
C11 = np.float32(0.8577286100002721)
C12 = np.float32(0.8314696123025452)
C13 = np.float32(0.8032075314806449)
C14 = np.float32(0.773010453362737)
C15 = np.float32(0.7409511253549591)
C16 = np.float32(0.7071067811865476)
C17 = np.float32(0.6715589548470183)
C18 = np.float32(0.6343932841636455)
C19 = np.float32(0.5956993044924335)
C20 = np.float32(0.5555702330196023)
C21 = np.float32(0.5141027441932217)
C22 = np.float32(0.4713967368259978)
C23 = np.float32(0.4275550934302822)
C24 = np.float32(0.38268343236508984)
C25 = np.float32(0.33688985339222005)
C26 = np.float32(0.29028467725446233)
C27 = np.float32(0.24298017990326398)
C28 = np.float32(0.19509032201612833)
C29 = np.float32(0.14673047445536175)
C30 = np.float32(0.09801714032956077)
C31 = np.float32(0.049067674327418126)


@kernel
def forward_2(data: Any) -> None:
    """Transform length 2 along the middle axis, in place."""
    source = np.empty((2, LANES), np.float32)
    target = np.empty((2, LANES), np.float32)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(2):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * np.float32(1.0)
            for k in range(LANES):
                s2_0 = source[0, k] + source[1, k]
                d2_0 = source[0, k] - source[1, k]
                y0 = s2_0 * C16
                y1 = d2_0 * C16
                target[0, k] = y0
                target[1, k] = y1
            for i in range(2):
                for k in range(LANES):
                    data[o, i, j + k] = target[i, k]


@kernel
def forward_4(data: Any) -> None:
    """Transform length 4 along the middle axis, in place."""
    source = np.empty((4, LANES), np.float32)
    target = np.empty((4, LANES), np.float32)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(4):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * np.float32(0.7071067811865476)
            for k in range(LANES):
                s4_0 = source[0, k] + source[3, k]
                s4_1 = source[1, k] + source[2, k]
                d4_0 = source[0, k] - source[3, k]
                d4_1 = source[1, k] - source[2, k]
                s2_0 = s4_0 + s4_1
                d2_0 = s4_0 - s4_1
                y0 = s2_0 * C16
                y2 = d2_0 * C16
                y1 = d4_0 * C8 + d4_1 * C24
                y3 = d4_0 * C24 - d4_1 * C8
                target[0, k] = y0
                target[1, k] = y1
                target[2, k] = y2
                target[3, k] = y3
            for i in range(4):
                for k in range(LANES):
                    data[o, i, j + k] = target[i, k]


@kernel
def forward_8(data: Any) -> None:
    """Transform length 8 along the middle axis, in place."""
    source = np.empty((8, LANES), np.float32)
    target = np.empty((8, LANES), np.float32)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(8):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * np.float32(0.5)
            for k in range(LANES):
                s8_0 = source[0, k] + source[7, k]
                s8_1 = source[1, k] + source[6, k]
                s8_2 = source[2, k] + source[5, k]
                s8_3 = source[3, k] + source[4, k]
                d8_0 = source[0, k] - source[7, k]
                d8_1 = source[1, k] - source[6, k]
                d8_2 = source[2, k] - source[5, k]
                d8_3 = source[3, k] - source[4, k]
                s4_0 = s8_0 + s8_3
                s4_1 = s8_1 + s8_2
                d4_0 = s8_0 - s8_3
                d4_1 = s8_1 - s8_2
                s2_0 = s4_0 + s4_1
                d2_0 = s4_0 - s4_1
                y0 = s2_0 * C16
                y4 = d2_0 * C16
                y2 = d4_0 * C8 + d4_1 * C24
                y6 = d4_0 * C24 - d4_1 * C8
                y1 = d8_0 * C4 + d8_1 * C12 + d8_2 * C20 + d8_3 * C28
                y3 = d8_0 * C12 - d8_1 * C28 - d8_2 * C4 - d8_3 * C20
                y5 = d8_0 * C20 - d8_1 * C4 + d8_2 * C28 + d8_3 * C12
                y7 = d8_0 * C28 - d8_1 * C20 + d8_2 * C12 - d8_3 * C4
                target[0, k] = y0
                target[1, k] = y1
                target[2, k] = y2
                target[3, k] = y3
                target[4, k] = y4
                target[5, k] = y5
                target[6, k] = y6
                target[7, k] = y7
            for i in range(8):
                for k in range(LANES):
                    data[o, i, j + k] = target[i, k]


@kernel
def forward_16(data: Any) -> None:
    """Transform length 16 along the middle axis, in place."""
    source = np.empty((16, LANES), np.float32)
    target = np.empty((16, LANES), np.float32)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(16):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * np.float32(0.3535533905932738)
            for k in range(LANES):
                s16_0 = source[0, k] + source[15, k]
                s16_1 = source[1, k] + source[14, k]
                s16_2 = source[2, k] + source[13, k]
                s16_3 = source[3, k] + source[12, k]
                s16_4 = source[4, k] + source[11, k]
                s16_5 = source[5, k] + source[10, k]
                s16_6 = source[6, k] + source[9, k]
                s16_7 = source[7, k] + source[8, k]
                d16_0 = source[0, k] - source[15, k]
                d16_1 = source[1, k] - source[14, k]
                d16_2 = source[2, k] - source[13, k]
                d16_3 = source[3, k] - source[12, k]
                d16_4 = source[4, k] - source[11, k]
                d16_5 = source[5, k] - source[10, k]
                d16_6 = source[6, k] - source[9, k]
                d16_7 = source[7, k] - source[8, k]
                s8_0 = s16_0 + s16_7
                s8_1 = s16_1 + s16_6
                s8_2 = s16_2 + s16_5
                s8_3 = s16_3 + s16_4
                d8_0 = s16_0 - s16_7
                d8_1 = s16_1 - s16_6
                d8_2 = s16_2 - s16_5
                d8_3 = s16_3 - s16_4
                s4_0 = s8_0 + s8_3
                s4_1 = s8_1 + s8_2
                d4_0 = s8_0 - s8_3
                d4_1 = s8_1 - s8_2
                s2_0 = s4_0 + s4_1
                d2_0 = s4_0 - s4_1
                y0 = s2_0 * C16
                y8 = d2_0 * C16
                y4 = d4_0 * C8 + d4_1 * C24
                y12 = d4_0 * C24 - d4_1 * C8
                y2 = d8_0 * C4 + d8_1 * C12 + d8_2 * C20 + d8_3 * C28
                y6 = d8_0 * C12 - d8_1 * C28 - d8_2 * C4 - d8_3 * C20
                y10 = d8_0 * C20 - d8_1 * C4 + d8_2 * C28 + d8_3 * C12
                y14 = d8_0 * C28 - d8_1 * C20 + d8_2 * C12 - d8_3 * C4
                y1 = d16_0 * C2 + d16_1 * C6 + d16_2 * C10 + d16_3 * C14 + d16_4 * C18
                y1 = y1 + d16_5 * C22 + d16_6 * C26 + d16_7 * C30
                y3 = d16_0 * C6 + d16_1 * C18 + d16_2 * C30 - d16_3 * C22 - d16_4 * C10
                y3 = y3 - d16_5 * C2 - d16_6 * C14 - d16_7 * C26
                y5 = d16_0 * C10 + d16_1 * C30 - d16_2 * C14 - d16_3 * C6 - d16_4 * C26
                y5 = y5 + d16_5 * C18 + d16_6 * C2 + d16_7 * C22
                y7 = d16_0 * C14 - d16_1 * C22 - d16_2 * C6 + d16_3 * C30 + d16_4 * C2
                y7 = y7 + d16_5 * C26 - d16_6 * C10 - d16_7 * C18
                y9 = d16_0 * C18 - d16_1 * C10 - d16_2 * C26 + d16_3 * C2 - d16_4 * C30
                y9 = y9 - d16_5 * C6 + d16_6 * C22 + d16_7 * C14
                y11 = d16_0 * C22 - d16_1 * C2 + d16_2 * C18 + d16_3 * C26 - d16_4 * C6
                y11 = y11 + d16_5 * C14 + d16_6 * C30 - d16_7 * C10
                y13 = d16_0 * C26 - d16_1 * C14 + d16_2 * C2 - d16_3 * C10 + d16_4 * C22
                y13 = y13 + d16_5 * C30 - d16_6 * C18 + d16_7 * C6
                y15 = d16_0 * C30 - d16_1 * C26 + d16_2 * C22 - d16_3 * C18 + d16_4 * C14
                y15 = y15 - d16_5 * C10 + d16_6 * C6 - d16_7 * C2
                target[0, k] = y0
                target[1, k] = y1
                target[2, k] = y2
                target[3, k] = y3
                target[4, k] = y4
                target[5, k] = y5
                target[6, k] = y6
                target[7, k] = y7
                target[8, k] = y8
                target[9, k] = y9
                target[10, k] = y10
                target[11, k] = y11
                target[12, k] = y12
                target[13, k] = y13
                target[14, k] = y14
                target[15, k] = y15
            for i in range(16):
                for k in range(LANES):
                    data[o, i, j + k] = target[i, k]


@kernel
def forward_32(data: Any) -> None:
    """Transform length 32 along the middle axis, in place."""
    source = np.empty((32, LANES), np.float32)
    target = np.empty((32, LANES), np.float32)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for i in range(32):
                for k in range(LANES):
                    source[i, k] = data[o, i, j + k] * np.float32(0.25)
            for k in range(LANES):
                s32_0 = source[0, k] + source[31, k]
                s32_1 = source[1, k] + source[30, k]
                s32_2 = source[2, k] + source[29, k]
                s32_3 = source[3, k] + source[28, k]
                s32_4 = source[4, k] + source[27, k]
                s32_5 = source[5, k] + source[26, k]
                s32_6 = source[6, k] + source[25, k]
                s32_7 = source[7, k] + source[24, k]
                s32_8 = source[8, k] + source[23, k]
                s32_9 = source[9, k] + source[22, k]
                s32_10 = source[10, k] + source[21, k]
                s32_11 = source[11, k] + source[20, k]
                s32_12 = source[12, k] + source[19, k]
                s32_13 = source[13, k] + source[18, k]
                s32_14 = source[14, k] + source[17, k]
                s32_15 = source[15, k] + source[16, k]
                d32_0 = source[0, k] - source[31, k]
                d32_1 = source[1, k] - source[30, k]
                d32_2 = source[2, k] - source[29, k]
                d32_3 = source[3, k] - source[28, k]
                d32_4 = source[4, k] - source[27, k]
                d32_5 = source[5, k] - source[26, k]
                d32_6 = source[6, k] - source[25, k]
                d32_7 = source[7, k] - source[24, k]
                d32_8 = source[8, k] - source[23, k]
                d32_9 = source[9, k] - source[22, k]
                d32_10 = source[10, k] - source[21, k]
                d32_11 = source[11, k] - source[20, k]
                d32_12 = source[12, k] - source[19, k]
                d32_13 = source[13, k] - source[18, k]
                d32_14 = source[14, k] - source[17, k]
                d32_15 = source[15, k] - source[16, k]
                s16_0 = s32_0 + s32_15
                s16_1 = s32_1 + s32_14
                s16_2 = s32_2 + s32_13
                s16_3 = s32_3 + s32_12
                s16_4 = s32_4 + s32_11
                s16_5 = s32_5 + s32_10
                s16_6 = s32_6 + s32_9
                s16_7 = s32_7 + s32_8
                d16_0 = s32_0 - s32_15
                d16_1 = s32_1 - s32_14
                d16_2 = s32_2 - s32_13
                d16_3 = s32_3 - s32_12
                d16_4 = s32_4 - s32_11
                d16_5 = s32_5 - s32_10
                d16_6 = s32_6 - s32_9
                d16_7 = s32_7 - s32_8
                s8_0 = s16_0 + s16_7
                s8_1 = s16_1 + s16_6
                s8_2 = s16_2 + s16_5
                s8_3 = s16_3 + s16_4
                d8_0 = s16_0 - s16_7
                d8_1 = s16_1 - s16_6
                d8_2 = s16_2 - s16_5
                d8_3 = s16_3 - s16_4
                s4_0 = s8_0 + s8_3
                s4_1 = s8_1 + s8_2
                d4_0 = s8_0 - s8_3
                d4_1 = s8_1 - s8_2
                s2_0 = s4_0 + s4_1
                d2_0 = s4_0 - s4_1
                y0 = s2_0 * C16
                y16 = d2_0 * C16
                y8 = d4_0 * C8 + d4_1 * C24
                y24 = d4_0 * C24 - d4_1 * C8
                y4 = d8_0 * C4 + d8_1 * C12 + d8_2 * C20 + d8_3 * C28
                y12 = d8_0 * C12 - d8_1 * C28 - d8_2 * C4 - d8_3 * C20
                y20 = d8_0 * C20 - d8_1 * C4 + d8_2 * C28 + d8_3 * C12
                y28 = d8_0 * C28 - d8_1 * C20 + d8_2 * C12 - d8_3 * C4
                y2 = d16_0 * C2 + d16_1 * C6 + d16_2 * C10 + d16_3 * C14 + d16_4 * C18
                y2 = y2 + d16_5 * C22 + d16_6 * C26 + d16_7 * C30
                y6 = d16_0 * C6 + d16_1 * C18 + d16_2 * C30 - d16_3 * C22 - d16_4 * C10
                y6 = y6 - d16_5 * C2 - d16_6 * C14 - d16_7 * C26
                y10 = d16_0 * C10 + d16_1 * C30 - d16_2 * C14 - d16_3 * C6 - d16_4 * C26
                y10 = y10 + d16_5 * C18 + d16_6 * C2 + d16_7 * C22
                y14 = d16_0 * C14 - d16_1 * C22 - d16_2 * C6 + d16_3 * C30 + d16_4 * C2
                y14 = y14 + d16_5 * C26 - d16_6 * C10 - d16_7 * C18
                y18 = d16_0 * C18 - d16_1 * C10 - d16_2 * C26 + d16_3 * C2 - d16_4 * C30
                y18 = y18 - d16_5 * C6 + d16_6 * C22 + d16_7 * C14
                y22 = d16_0 * C22 - d16_1 * C2 + d16_2 * C18 + d16_3 * C26 - d16_4 * C6
                y22 = y22 + d16_5 * C14 + d16_6 * C30 - d16_7 * C10
                y26 = d16_0 * C26 - d16_1 * C14 + d16_2 * C2 - d16_3 * C10 + d16_4 * C22
                y26 = y26 + d16_5 * C30 - d16_6 * C18 + d16_7 * C6
                y30 = d16_0 * C30 - d16_1 * C26 + d16_2 * C22 - d16_3 * C18 + d16_4 * C14
                y30 = y30 - d16_5 * C10 + d16_6 * C6 - d16_7 * C2
                y1 = d32_0 * C1 + d32_1 * C3 + d32_2 * C5 + d32_3 * C7 + d32_4 * C9
                y1 = y1 + d32_5 * C11 + d32_6 * C13 + d32_7 * C15 + d32_8 * C17 + d32_9 * C19
                y1 = y1 + d32_10 * C21 + d32_11 * C23 + d32_12 * C25 + d32_13 * C27 + d32_14 * C29
                y1 = y1 + d32_15 * C31
                y3 = d32_0 * C3 + d32_1 * C9 + d32_2 * C15 + d32_3 * C21 + d32_4 * C27
                y3 = y3 - d32_5 * C31 - d32_6 * C25 - d32_7 * C19 - d32_8 * C13 - d32_9 * C7
                y3 = y3 - d32_10 * C1 - d32_11 * C5 - d32_12 * C11 - d32_13 * C17 - d32_14 * C23
                y3 = y3 - d32_15 * C29
                y5 = d32_0 * C5 + d32_1 * C15 + d32_2 * C25 - d32_3 * C29 - d32_4 * C19
                y5 = y5 - d32_5 * C9 - d32_6 * C1 - d32_7 * C11 - d32_8 * C21 - d32_9 * C31
                y5 = y5 + d32_10 * C23 + d32_11 * C13 + d32_12 * C3 + d32_13 * C7 + d32_14 * C17
                y5 = y5 + d32_15 * C27
                y7 = d32_0 * C7 + d32_1 * C21 - d32_2 * C29 - d32_3 * C15 - d32_4 * C1
                y7 = y7 - d32_5 * C13 - d32_6 * C27 + d32_7 * C23 + d32_8 * C9 + d32_9 * C5
                y7 = y7 + d32_10 * C19 - d32_11 * C31 - d32_12 * C17 - d32_13 * C3 - d32_14 * C11
                y7 = y7 - d32_15 * C25
                y9 = d32_0 * C9 + d32_1 * C27 - d32_2 * C19 - d32_3 * C1 - d32_4 * C17
                y9 = y9 + d32_5 * C29 + d32_6 * C11 + d32_7 * C7 + d32_8 * C25 - d32_9 * C21
                y9 = y9 - d32_10 * C3 - d32_11 * C15 + d32_12 * C31 + d32_13 * C13 + d32_14 * C5
                y9 = y9 + d32_15 * C23
                y11 = d32_0 * C11 - d32_1 * C31 - d32_2 * C9 - d32_3 * C13 + d32_4 * C29
                y11 = y11 + d32_5 * C7 + d32_6 * C15 - d32_7 * C27 - d32_8 * C5 - d32_9 * C17
                y11 = y11 + d32_10 * C25 + d32_11 * C3 + d32_12 * C19 - d32_13 * C23 - d32_14 * C1
                y11 = y11 - d32_15 * C21
                y13 = d32_0 * C13 - d32_1 * C25 - d32_2 * C1 - d32_3 * C27 + d32_4 * C11
                y13 = y13 + d32_5 * C15 - d32_6 * C23 - d32_7 * C3 - d32_8 * C29 + d32_9 * C9
                y13 = y13 + d32_10 * C17 - d32_11 * C21 - d32_12 * C5 - d32_13 * C31 + d32_14 * C7
                y13 = y13 + d32_15 * C19
                y15 = d32_0 * C15 - d32_1 * C19 - d32_2 * C11 + d32_3 * C23 + d32_4 * C7
                y15 = y15 - d32_5 * C27 - d32_6 * C3 + d32_7 * C31 + d32_8 * C1 + d32_9 * C29
                y15 = y15 - d32_10 * C5 - d32_11 * C25 + d32_12 * C9 + d32_13 * C21 - d32_14 * C13
                y15 = y15 - d32_15 * C17
                y17 = d32_0 * C17 - d32_1 * C13 - d32_2 * C21 + d32_3 * C9 + d32_4 * C25
                y17 = y17 - d32_5 * C5 - d32_6 * C29 + d32_7 * C1 - d32_8 * C31 - d32_9 * C3
                y17 = y17 + d32_10 * C27 + d32_11 * C7 - d32_12 * C23 - d32_13 * C11 + d32_14 * C19
                y17 = y17 + d32_15 * C15
                y19 = d32_0 * C19 - d32_1 * C7 - d32_2 * C31 + d32_3 * C5 - d32_4 * C21
                y19 = y19 - d32_5 * C17 + d32_6 * C9 + d32_7 * C29 - d32_8 * C3 + d32_9 * C23
                y19 = y19 + d32_10 * C15 - d32_11 * C11 - d32_12 * C27 + d32_13 * C1 - d32_14 * C25
                y19 = y19 - d32_15 * C13
                y21 = d32_0 * C21 - d32_1 * C1 + d32_2 * C23 + d32_3 * C19 - d32_4 * C3
                y21 = y21 + d32_5 * C25 + d32_6 * C17 - d32_7 * C5 + d32_8 * C27 + d32_9 * C15
                y21 = y21 - d32_10 * C7 + d32_11 * C29 + d32_12 * C13 - d32_13 * C9 + d32_14 * C31
                y21 = y21 + d32_15 * C11
                y23 = d32_0 * C23 - d32_1 * C5 + d32_2 * C13 - d32_3 * C31 - d32_4 * C15
                y23 = y23 + d32_5 * C3 - d32_6 * C21 - d32_7 * C25 + d32_8 * C7 - d32_9 * C11
                y23 = y23 + d32_10 * C29 + d32_11 * C17 - d32_12 * C1 + d32_13 * C19 + d32_14 * C27
                y23 = y23 - d32_15 * C9
                y25 = d32_0 * C25 - d32_1 * C11 + d32_2 * C3 - d32_3 * C17 + d32_4 * C31
                y25 = y25 + d32_5 * C19 - d32_6 * C5 + d32_7 * C9 - d32_8 * C23 - d32_9 * C27
                y25 = y25 + d32_10 * C13 - d32_11 * C1 + d32_12 * C15 - d32_13 * C29 - d32_14 * C21
                y25 = y25 + d32_15 * C7
                y27 = d32_0 * C27 - d32_1 * C17 + d32_2 * C7 - d32_3 * C3 + d32_4 * C13
                y27 = y27 - d32_5 * C23 - d32_6 * C31 + d32_7 * C21 - d32_8 * C11 + d32_9 * C1
                y27 = y27 - d32_10 * C9 + d32_11 * C19 - d32_12 * C29 - d32_13 * C25 + d32_14 * C15
                y27 = y27 - d32_15 * C5
                y29 = d32_0 * C29 - d32_1 * C23 + d32_2 * C17 - d32_3 * C11 + d32_4 * C5
                y29 = y29 - d32_5 * C1 + d32_6 * C7 - d32_7 * C13 + d32_8 * C19 - d32_9 * C25
                y29 = y29 + d32_10 * C31 + d32_11 * C27 - d32_12 * C21 + d32_13 * C15 - d32_14 * C9
                y29 = y29 + d32_15 * C3
                y31 = d32_0 * C31 - d32_1 * C29 + d32_2 * C27 - d32_3 * C25 + d32_4 * C23
                y31 = y31 - d32_5 * C21 + d32_6 * C19 - d32_7 * C17 + d32_8 * C15 - d32_9 * C13
                y31 = y31 + d32_10 * C11 - d32_11 * C9 + d32_12 * C7 - d32_13 * C5 + d32_14 * C3
                y31 = y31 - d32_15 * C1
                target[0, k] = y0
                target[1, k] = y1
                target[2, k] = y2
                target[3, k] = y3
                target[4, k] = y4
                target[5, k] = y5
                target[6, k] = y6
                target[7, k] = y7
                target[8, k] = y8
                target[9, k] = y9
                target[10, k] = y10
                target[11, k] = y11
                target[12, k] = y12
                target[13, k] = y13
                target[14, k] = y14
                target[15, k] = y15
                target[16, k] = y16
                target[17, k] = y17
                target[18, k] = y18
                target[19, k] = y19
                target[20, k] = y20
                target[21, k] = y21
                target[22, k] = y22
                target[23, k] = y23
                target[24, k] = y24
                target[25, k] = y25
                target[26, k] = y26
                target[27, k] = y27
                target[28, k] = y28
                target[29, k] = y29
                target[30, k] = y30
                target[31, k] = y31
            for i in range(32):
                for k in range(LANES):
                    data[o, i, j + k] = target[i, k]
