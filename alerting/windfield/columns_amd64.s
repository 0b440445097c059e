#include "textflag.h"

// func columnsAVX2(out *float64, n int, a *float64, stride int, w *float64, rows int)
//
// Sixteen columns at a time, and of the rest as many as there are: the sums stay in
// registers while the rows go by, and each must wait for its last addition, so that
// fewer sums take as long. A product is rounded before it is added (no fused
// multiplication), in the order of the rows, as the Go code has it.
TEXT ·columnsAVX2(SB), NOSPLIT, $0-48
	MOVQ out+0(FP), DI
	MOVQ n+8(FP), CX
	MOVQ a+16(FP), SI
	MOVQ stride+24(FP), DX
	SHLQ $3, DX // bytes
	MOVQ w+32(FP), BX
	MOVQ rows+40(FP), R8

sixteen:
	CMPQ CX, $16
	JLT  twelve
	VXORPD Y0, Y0, Y0
	VXORPD Y1, Y1, Y1
	VXORPD Y2, Y2, Y2
	VXORPD Y3, Y3, Y3
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row16:
	VBROADCASTSD (R10), Y4
	VMULPD (R9), Y4, Y5
	VMULPD 32(R9), Y4, Y6
	VMULPD 64(R9), Y4, Y7
	VMULPD 96(R9), Y4, Y8
	VADDPD Y5, Y0, Y0
	VADDPD Y6, Y1, Y1
	VADDPD Y7, Y2, Y2
	VADDPD Y8, Y3, Y3
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row16
	VMOVUPD Y0, (DI)
	VMOVUPD Y1, 32(DI)
	VMOVUPD Y2, 64(DI)
	VMOVUPD Y3, 96(DI)
	ADDQ $128, DI
	ADDQ $128, SI
	SUBQ $16, CX
	JMP  sixteen

twelve:
	CMPQ CX, $12
	JLT  eight
	VXORPD Y0, Y0, Y0
	VXORPD Y1, Y1, Y1
	VXORPD Y2, Y2, Y2
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row12:
	VBROADCASTSD (R10), Y4
	VMULPD (R9), Y4, Y5
	VMULPD 32(R9), Y4, Y6
	VMULPD 64(R9), Y4, Y7
	VADDPD Y5, Y0, Y0
	VADDPD Y6, Y1, Y1
	VADDPD Y7, Y2, Y2
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row12
	VMOVUPD Y0, (DI)
	VMOVUPD Y1, 32(DI)
	VMOVUPD Y2, 64(DI)
	ADDQ $96, DI
	ADDQ $96, SI
	SUBQ $12, CX

eight:
	CMPQ CX, $8
	JLT  four
	VXORPD Y0, Y0, Y0
	VXORPD Y1, Y1, Y1
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row8:
	VBROADCASTSD (R10), Y4
	VMULPD (R9), Y4, Y5
	VMULPD 32(R9), Y4, Y6
	VADDPD Y5, Y0, Y0
	VADDPD Y6, Y1, Y1
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row8
	VMOVUPD Y0, (DI)
	VMOVUPD Y1, 32(DI)
	ADDQ $64, DI
	ADDQ $64, SI
	SUBQ $8, CX

four:
	CMPQ CX, $4
	JLT  done
	VXORPD Y0, Y0, Y0
	MOVQ SI, R9
	MOVQ BX, R10
	MOVQ R8, R11

row4:
	VBROADCASTSD (R10), Y4
	VMULPD (R9), Y4, Y5
	VADDPD Y5, Y0, Y0
	ADDQ DX, R9
	ADDQ $8, R10
	DECQ R11
	JNZ  row4
	VMOVUPD Y0, (DI)
	ADDQ $32, DI
	ADDQ $32, SI
	SUBQ $4, CX
	JMP  four

done:
	VZEROUPPER
	RET
