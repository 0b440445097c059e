#include "textflag.h"

DATA strays<>+0(SB)/8, $0.04 // lineStrays
DATA strays<>+8(SB)/8, $1.0
GLOBL strays<>(SB), RODATA, $16

// func timesAVX2(slow, mean, spread, ssr, product, hits *float64, n int) (most float64)
//
// Four speeds at a time, of the seventeen of a row: the last four begin within
// those before. Each product is rounded before it is added, in the order of the Go
// code.
TEXT ·timesAVX2(SB), NOSPLIT, $0-64
	MOVQ slow+0(FP), R8
	MOVQ mean+8(FP), R9
	MOVQ spread+16(FP), R10
	MOVQ ssr+24(FP), R11
	MOVQ product+32(FP), R12
	MOVQ hits+40(FP), SI
	MOVQ n+48(FP), CX
	VBROADCASTSD strays<>+0(SB), Y12
	VBROADCASTSD strays<>+8(SB), Y13
	VXORPD Y11, Y11, Y11 // the greatest product
	XORQ AX, AX

speeds:
	VMOVUPD (R8)(AX*1), Y0
	VBROADCASTSD (SI), Y14
	VMULPD Y0, Y14, Y14 // when the line passes the first
	VXORPD Y1, Y1, Y1 // sum of weights
	VXORPD Y2, Y2, Y2 // with the times
	VXORPD Y3, Y3, Y3 // with their squares
	VMOVAPD Y13, Y4   // product of the variances
	MOVQ SI, DI
	MOVQ CX, DX

hit:
	VBROADCASTSD (DI), Y5
	VMULPD Y0, Y5, Y5   // away
	VSUBPD Y14, Y5, Y6
	VMULPD Y6, Y12, Y6  // rough
	VMULPD Y6, Y6, Y6
	VBROADCASTSD 8(DI), Y7
	VADDPD Y6, Y7, Y7   // v
	VBROADCASTSD 16(DI), Y8
	VSUBPD Y5, Y8, Y8   // r
	VDIVPD Y7, Y13, Y9  // 1/v
	VADDPD Y9, Y1, Y1
	VMULPD Y9, Y8, Y10
	VADDPD Y10, Y2, Y2
	VMULPD Y8, Y8, Y10
	VMULPD Y9, Y10, Y10
	VADDPD Y10, Y3, Y3
	VMULPD Y7, Y4, Y4
	ADDQ $24, DI
	DECQ DX
	JNZ  hit
	VMAXPD Y11, Y4, Y11
	VDIVPD Y1, Y2, Y5 // mean
	VMOVUPD Y5, (R9)(AX*1)
	VDIVPD Y1, Y13, Y6
	VMOVUPD Y6, (R10)(AX*1)
	VMULPD Y5, Y2, Y5
	VSUBPD Y5, Y3, Y3
	VXORPD Y7, Y7, Y7
	VMAXPD Y7, Y3, Y3
	VMOVUPD Y3, (R11)(AX*1)
	VMULPD Y1, Y4, Y4
	VMOVUPD Y4, (R12)(AX*1)
	CMPQ AX, $104
	JEQ  ended
	ADDQ $32, AX
	CMPQ AX, $128
	JNE  speeds
	MOVQ $104, AX
	JMP  speeds

ended:
	VEXTRACTF128 $1, Y11, X0
	VMAXPD X0, X11, X0
	VPERMILPD $1, X0, X1
	VMAXSD X1, X0, X0
	VMOVSD X0, most+56(FP)
	VZEROUPPER
	RET
