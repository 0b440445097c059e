#include "textflag.h"

// func columns3AVX2(out *float64, outStride, n int, a *float64, stride int, w *float64, rows int)
//
// Eight columns at a time, and the rest by fours: three sums for each stay in
// registers while the rows go by. Each sum is that of columnsAVX2.
TEXT ·columns3AVX2(SB), NOSPLIT, $0-56
	MOVQ out+0(FP), DI
	MOVQ outStride+8(FP), R12
	SHLQ $3, R12 // bytes
	MOVQ n+16(FP), CX
	MOVQ a+24(FP), SI
	MOVQ stride+32(FP), DX
	SHLQ $3, DX
	MOVQ w+40(FP), BX
	MOVQ rows+48(FP), R8
	MOVQ R8, R13
	SHLQ $3, R13 // from one w to the next

eight:
	CMPQ CX, $8
	JLT  four
	VXORPD Y0, Y0, Y0
	VXORPD Y1, Y1, Y1
	VXORPD Y2, Y2, Y2
	VXORPD Y3, Y3, Y3
	VXORPD Y4, Y4, Y4
	VXORPD Y5, Y5, Y5
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row8:
	VMOVUPD (R9), Y6
	VMOVUPD 32(R9), Y7
	VBROADCASTSD (R10), Y8
	VMULPD Y6, Y8, Y9
	VMULPD Y7, Y8, Y10
	VBROADCASTSD (R10)(R13*1), Y11
	VADDPD Y9, Y0, Y0
	VADDPD Y10, Y1, Y1
	VMULPD Y6, Y11, Y9
	VMULPD Y7, Y11, Y10
	VBROADCASTSD (R10)(R13*2), Y12
	VADDPD Y9, Y2, Y2
	VADDPD Y10, Y3, Y3
	VMULPD Y6, Y12, Y9
	VMULPD Y7, Y12, Y10
	VADDPD Y9, Y4, Y4
	VADDPD Y10, Y5, Y5
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row8
	VMOVUPD Y0, (DI)
	VMOVUPD Y1, 32(DI)
	VMOVUPD Y2, (DI)(R12*1)
	VMOVUPD Y3, 32(DI)(R12*1)
	VMOVUPD Y4, (DI)(R12*2)
	VMOVUPD Y5, 32(DI)(R12*2)
	ADDQ $64, DI
	ADDQ $64, SI
	SUBQ $8, CX
	JMP  eight

four:
	CMPQ CX, $4
	JLT  done
	VXORPD Y0, Y0, Y0
	VXORPD Y2, Y2, Y2
	VXORPD Y4, Y4, Y4
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row4:
	VMOVUPD (R9), Y6
	VBROADCASTSD (R10), Y8
	VBROADCASTSD (R10)(R13*1), Y11
	VBROADCASTSD (R10)(R13*2), Y12
	VMULPD Y6, Y8, Y8
	VMULPD Y6, Y11, Y11
	VMULPD Y6, Y12, Y12
	VADDPD Y8, Y0, Y0
	VADDPD Y11, Y2, Y2
	VADDPD Y12, Y4, Y4
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row4
	VMOVUPD Y0, (DI)
	VMOVUPD Y2, (DI)(R12*1)
	VMOVUPD Y4, (DI)(R12*2)
	ADDQ $32, DI
	ADDQ $32, SI
	SUBQ $4, CX
	JMP  four

done:
	VZEROUPPER
	RET

DATA half<>+0(SB)/8, $0.5
GLOBL half<>(SB), RODATA, $8

// func explainAVX2(out *float64, n int, b, precision *float64, stride int, odds, extra *float64) (fit, best float64)
//
// Four patterns at a time, each product rounded before it is added and in the
// order of the Go code.
TEXT ·explainAVX2(SB), NOSPLIT, $0-72
	MOVQ out+0(FP), DI
	MOVQ n+8(FP), CX
	MOVQ b+16(FP), R8
	MOVQ precision+24(FP), R9
	MOVQ stride+32(FP), DX
	SHLQ $3, DX // bytes
	MOVQ odds+40(FP), R10
	MOVQ extra+48(FP), R11
	LEAQ (R9)(DX*2), R12
	ADDQ DX, R12 // the fourth row of precision
	VXORPD Y14, Y14, Y14 // fit, from 0
	MOVQ $0xFFF0000000000000, AX
	MOVQ AX, X15
	VBROADCASTSD X15, Y15 // best, from minus infinity
	VBROADCASTSD half<>(SB), Y13

pattern:
	CMPQ CX, $4
	JLT  greatest
	VMOVUPD (R8), Y0
	VMOVUPD (R8)(DX*1), Y1
	VMOVUPD (R8)(DX*2), Y2
	VMULPD Y0, Y0, Y3
	VMULPD (R9), Y3, Y3
	VMULPD Y1, Y1, Y4
	VMULPD (R12), Y4, Y4
	VADDPD Y4, Y3, Y3
	VMULPD Y2, Y2, Y5
	VMULPD (R12)(DX*2), Y5, Y5
	VADDPD Y5, Y3, Y3
	VMULPD Y1, Y0, Y6
	VMULPD (R9)(DX*1), Y6, Y6
	VMULPD Y2, Y0, Y7
	VMULPD (R9)(DX*2), Y7, Y7
	VADDPD Y7, Y6, Y6
	VMULPD Y2, Y1, Y8
	VMULPD (R12)(DX*1), Y8, Y8
	VADDPD Y8, Y6, Y6
	VADDPD Y6, Y6, Y6
	VADDPD Y6, Y3, Y3
	VMAXPD Y14, Y3, Y14
	VMULPD Y13, Y3, Y3
	VADDPD (R10), Y3, Y3
	TESTQ R11, R11
	JZ   weighed
	VADDPD (R11), Y3, Y3
	ADDQ $32, R11

weighed:
	VMOVUPD Y3, (DI)
	VMAXPD Y15, Y3, Y15
	ADDQ $32, DI
	ADDQ $32, R8
	ADDQ $32, R9
	ADDQ $32, R10
	ADDQ $32, R12
	SUBQ $4, CX
	JMP  pattern

greatest:
	VEXTRACTF128 $1, Y14, X0
	VMAXPD X0, X14, X0
	VPERMILPD $1, X0, X1
	VMAXSD X1, X0, X0
	VMOVSD X0, fit+56(FP)
	VEXTRACTF128 $1, Y15, X0
	VMAXPD X0, X15, X0
	VPERMILPD $1, X0, X1
	VMAXSD X1, X0, X0
	VMOVSD X0, best+64(FP)
	VZEROUPPER
	RET

// func drawnAVX2(row, mean *float64, n int, base, slope, noise *float64, excess float64)
TEXT ·drawnAVX2(SB), NOSPLIT, $0-56
	MOVQ row+0(FP), DI
	MOVQ mean+8(FP), SI
	MOVQ n+16(FP), CX
	MOVQ base+24(FP), R8
	MOVQ slope+32(FP), R9
	MOVQ noise+40(FP), R10
	VBROADCASTSD excess+48(FP), Y0
	XORQ AX, AX

target:
	CMPQ CX, $4
	JLT  drawn
	VMULPD (R9)(AX*1), Y0, Y1
	VADDPD (R8)(AX*1), Y1, Y1
	VADDPD (R10)(AX*1), Y1, Y1
	VMOVUPD Y1, (DI)(AX*1)
	VADDPD (SI)(AX*1), Y1, Y1
	VMOVUPD Y1, (SI)(AX*1)
	ADDQ $32, AX
	SUBQ $4, CX
	JMP  target

drawn:
	VZEROUPPER
	RET

// func addProductsAVX2(out *float64, n int, a, b *float64)
TEXT ·addProductsAVX2(SB), NOSPLIT, $0-32
	MOVQ out+0(FP), DI
	MOVQ n+8(FP), CX
	MOVQ a+16(FP), SI
	MOVQ b+24(FP), DX
	XORQ AX, AX

place:
	CMPQ CX, $4
	JLT  added
	VMOVUPD (SI)(AX*1), Y0
	VMULPD (DX)(AX*1), Y0, Y0
	VADDPD (DI)(AX*1), Y0, Y0
	VMOVUPD Y0, (DI)(AX*1)
	ADDQ $32, AX
	SUBQ $4, CX
	JMP  place

added:
	VZEROUPPER
	RET

DATA exponent<>+0(SB)/8, $1.4426950408889634073599246810018920 // 1/ln 2
DATA exponent<>+8(SB)/8, $0.69314718055966295651160180568695068359375 // upper half of ln 2
DATA exponent<>+16(SB)/8, $0.28235290563031577122588448175013436025525412068e-12 // lower half
DATA exponent<>+24(SB)/8, $0.0625
DATA exponent<>+32(SB)/8, $2.4801587301587301587e-5 // 1/8!, 1/7! and so on
DATA exponent<>+40(SB)/8, $1.9841269841269841270e-4
DATA exponent<>+48(SB)/8, $1.3888888888888888889e-3
DATA exponent<>+56(SB)/8, $8.3333333333333333333e-3
DATA exponent<>+64(SB)/8, $4.1666666666666666667e-2
DATA exponent<>+72(SB)/8, $1.6666666666666666667e-1
DATA exponent<>+80(SB)/8, $0.5
DATA exponent<>+88(SB)/8, $1.0
DATA exponent<>+96(SB)/8, $2.0
DATA exponent<>+104(SB)/8, $0x3FF
GLOBL exponent<>(SB), RODATA, $112

// func exponentialsAVX2(x *float64, n int)
//
// The method is that of N. Shibata, "Efficient evaluation methods of elementary
// functions suitable for SIMD computation", Computer Science - Research and
// Development 25, 2010, in the arithmetic that Go's math.Exp has for this
// processor, so that each of the four has the bits which that gives. Every number
// is of a size for which neither end of the range is near.
TEXT ·exponentialsAVX2(SB), NOSPLIT, $0-16
	MOVQ x+0(FP), DI
	MOVQ n+8(FP), CX
	VBROADCASTSD exponent<>+0(SB), Y3
	VBROADCASTSD exponent<>+8(SB), Y4
	VBROADCASTSD exponent<>+16(SB), Y5
	VBROADCASTSD exponent<>+24(SB), Y6
	VBROADCASTSD exponent<>+32(SB), Y7
	VBROADCASTSD exponent<>+40(SB), Y8
	VBROADCASTSD exponent<>+48(SB), Y9
	VBROADCASTSD exponent<>+56(SB), Y10
	VBROADCASTSD exponent<>+64(SB), Y11
	VBROADCASTSD exponent<>+72(SB), Y12
	VBROADCASTSD exponent<>+80(SB), Y13
	VBROADCASTSD exponent<>+88(SB), Y14
	VBROADCASTSD exponent<>+96(SB), Y15

number:
	CMPQ CX, $4
	JLT  raised
	VMOVUPD (DI), Y0
	VMULPD Y0, Y3, Y1
	VCVTPD2DQY Y1, X2 // the power of two, to the nearest
	VCVTDQ2PD X2, Y1
	VFNMADD231PD Y4, Y1, Y0
	VFNMADD231PD Y5, Y1, Y0
	VMULPD Y6, Y0, Y0
	VMOVAPD Y7, Y1
	VFMADD213PD Y8, Y0, Y1
	VFMADD213PD Y9, Y0, Y1
	VFMADD213PD Y10, Y0, Y1
	VFMADD213PD Y11, Y0, Y1
	VFMADD213PD Y12, Y0, Y1
	VFMADD213PD Y13, Y0, Y1
	VFMADD213PD Y14, Y0, Y1
	VMULPD Y1, Y0, Y0
	VADDPD Y15, Y0, Y1 // squared four times: e^x - 1 = y(y+2) with y = e^(x/2) - 1
	VMULPD Y1, Y0, Y0
	VADDPD Y15, Y0, Y1
	VMULPD Y1, Y0, Y0
	VADDPD Y15, Y0, Y1
	VMULPD Y1, Y0, Y0
	VADDPD Y15, Y0, Y1
	VFMADD213PD Y14, Y1, Y0
	VPMOVSXDQ X2, Y2
	VPBROADCASTQ exponent<>+104(SB), Y1
	VPADDQ Y1, Y2, Y2
	VPSLLQ $52, Y2, Y2
	VMULPD Y2, Y0, Y0
	VMOVUPD Y0, (DI)
	ADDQ $32, DI
	SUBQ $4, CX
	JMP  number

raised:
	VZEROUPPER
	RET
