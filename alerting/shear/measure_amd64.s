#include "textflag.h"

#define reach 20 // reachPoints
#define kmPoints 5 // kilometrePoints

// FOUR turns four points of four lines at SI, DX apart, into four points with the
// lines side by side at DI.
#define FOUR \
	VMOVUPD (SI), Y0; \
	VMOVUPD (SI)(DX*1), Y1; \
	VMOVUPD (SI)(DX*2), Y2; \
	VMOVUPD (SI)(R12*1), Y3; \
	VUNPCKLPD Y1, Y0, Y4; \
	VUNPCKHPD Y1, Y0, Y5; \
	VUNPCKLPD Y3, Y2, Y6; \
	VUNPCKHPD Y3, Y2, Y7; \
	VPERM2F128 $0x20, Y6, Y4, Y0; \
	VPERM2F128 $0x20, Y7, Y5, Y1; \
	VPERM2F128 $0x31, Y6, Y4, Y2; \
	VPERM2F128 $0x31, Y7, Y5, Y3; \
	VMOVUPD Y0, (DI); \
	VMOVUPD Y1, 32(DI); \
	VMOVUPD Y2, 64(DI); \
	VMOVUPD Y3, 96(DI)

// func measureAVX2(lines *float64, stride, n int, space, fall, rise, kilometre *float64)
//
// The greatest fall to a point is that from the greatest of the points within
// reach before it: subtraction keeps the order also when it is rounded, so the bits
// are those of the greatest of all differences. The points are taken in blocks as
// long as the reach. What is within reach before a point is then the beginning of
// its own block, whose greatest is carried along, and the end of the block before,
// whose greatest from every point on has been written down
// (M. van Herk, "A fast algorithm for local minimum and maximum filters on
// rectangular and octagonal kernels", Pattern Recognition Letters 13, 1992; from
// memory).
TEXT ·measureAVX2(SB), NOSPLIT, $0-56
	MOVQ lines+0(FP), SI
	MOVQ stride+8(FP), DX
	SHLQ $3, DX // bytes
	LEAQ (DX)(DX*2), R12
	MOVQ n+16(FP), CX
	MOVQ space+24(FP), R8
	// First the ends of the block before the first: nothing is there.
	MOVQ $0xFFF0000000000000, AX
	MOVQ AX, X0
	VBROADCASTSD X0, Y12 // minus infinity
	MOVQ $0x7FF0000000000000, AX
	MOVQ AX, X0
	VBROADCASTSD X0, Y13 // infinity
	MOVQ R8, R9
	MOVQ $reach, R10

empty:
	VMOVUPD Y12, (R9)
	VMOVUPD Y13, (32*reach)(R9)
	ADDQ $32, R9
	DECQ R10
	JNZ  empty

	// The lines, side by side; the last four points may overlap those before.
	LEAQ (64*reach)(R8), R13
	MOVQ R13, DI
	MOVQ CX, R10

turn:
	FOUR
	ADDQ $32, SI
	ADDQ $128, DI
	SUBQ $4, R10
	CMPQ R10, $4
	JGE  turn
	TESTQ R10, R10
	JZ   turned
	SUBQ $4, R10 // so many points back
	SHLQ $3, R10
	ADDQ R10, SI
	SHLQ $2, R10
	ADDQ R10, DI
	FOUR

turned:
	VXORPD Y14, Y14, Y14 // the greatest fall
	VXORPD Y15, Y15, Y15 // the greatest rise
	MOVQ R13, SI
	MOVQ CX, R11 // points left

block:
	VMOVAPD Y12, Y0 // greatest and least of the block so far
	VMOVAPD Y13, Y1
	MOVQ R8, R9
	MOVQ $reach, R10
	CMPQ R11, R10
	CMOVQLT R11, R10
	SUBQ R10, R11

point:
	VMOVUPD (SI), Y2
	VMAXPD (R9), Y0, Y3
	VSUBPD Y2, Y3, Y3
	VMAXPD Y14, Y3, Y14
	VMINPD (32*reach)(R9), Y1, Y4
	VSUBPD Y4, Y2, Y4
	VMAXPD Y15, Y4, Y15
	VMAXPD Y2, Y0, Y0
	VMINPD Y2, Y1, Y1
	ADDQ $32, SI
	ADDQ $32, R9
	DECQ R10
	JNZ  point
	TESTQ R11, R11
	JZ   ended
	VMOVAPD Y12, Y0
	VMOVAPD Y13, Y1
	MOVQ SI, R14
	MOVQ $reach, R10

back:
	SUBQ $32, R14
	SUBQ $32, R9
	VMAXPD (R14), Y0, Y0
	VMINPD (R14), Y1, Y1
	VMOVUPD Y0, (R9)
	VMOVUPD Y1, (32*reach)(R9)
	DECQ R10
	JNZ  back
	JMP  block

ended:
	VXORPD Y0, Y0, Y0
	SUBQ $kmPoints, CX
	JLE  told

far:
	VMOVUPD (R13), Y1
	VSUBPD (32*kmPoints)(R13), Y1, Y1
	VMAXPD Y0, Y1, Y0
	ADDQ $32, R13
	DECQ CX
	JNZ  far

told:
	MOVQ fall+32(FP), DI
	VMOVUPD Y14, (DI)
	MOVQ rise+40(FP), DI
	VMOVUPD Y15, (DI)
	MOVQ kilometre+48(FP), DI
	VMOVUPD Y0, (DI)
	VZEROUPPER
	RET
