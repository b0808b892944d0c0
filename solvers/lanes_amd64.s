#include "textflag.h"

// The kernels of lanes.go with the four lanes of a value in one register. They
// multiply and add in the order of the Go kernels and don't fuse, so that the
// results are the same bits. Offsets into eliminationStep: see laneStep.

DATA ·absMask+0(SB)/8, $0x7fffffffffffffff
DATA ·absMask+8(SB)/8, $0x7fffffffffffffff
DATA ·absMask+16(SB)/8, $0x7fffffffffffffff
DATA ·absMask+24(SB)/8, $0x7fffffffffffffff
GLOBL ·absMask(SB), RODATA|NOPTR, $32

DATA ·one+0(SB)/8, $1.0
GLOBL ·one(SB), RODATA|NOPTR, $8

DATA ·huge+0(SB)/8, $0x7fefffffffffffff
GLOBL ·huge(SB), RODATA|NOPTR, $8

DATA ·growth+0(SB)/8, $1.0e8
GLOBL ·growth(SB), RODATA|NOPTR, $8

// func factorAVX(steps *laneStep, n int, target *int32, v *float64) bool
TEXT ·factorAVX(SB), NOSPLIT, $0-33
	MOVQ steps+0(FP), SI
	MOVQ n+8(FP), CX
	MOVQ target+16(FP), DI
	MOVQ v+24(FP), R8
	VMOVUPD ·absMask(SB), Y15
	VBROADCASTSD ·growth(SB), Y14
	VXORPD Y13, Y13, Y13         // what went wrong, by lane
	VBROADCASTSD ·one(SB), Y12
	VBROADCASTSD ·huge(SB), Y11
	TESTQ CX, CX
	JZ    done

step:
	MOVLQSX 0(SI), R10           // pivot
	LEAQ    (R8)(R10*8), R10
	VDIVPD  (R10), Y12, Y0       // 1/pivot
	VMOVUPD Y0, (R10)
	VANDPD  Y0, Y15, Y1
	VCMPPD  $0x16, Y11, Y1, Y1   // not (|1/pivot| <= largest float64)
	VORPD   Y1, Y13, Y13
	MOVLQSX 12(SI), BX           // entries of the row
	MOVLQSX 16(SI), DX           // entries of the column
	ADDQ    $32, R10             // row
	MOVQ    BX, R11
	SHLQ    $5, R11
	ADDQ    R10, R11             // column
	MOVLQSX 24(SI), R12
	LEAQ    (DI)(R12*4), R12     // targets
	TESTQ   DX, DX
	JZ      next

row:
	VMULPD  (R11), Y0, Y1        // multiplier
	VMOVUPD Y1, (R11)
	VANDPD  Y1, Y15, Y2
	VCMPPD  $0x16, Y14, Y2, Y2
	VORPD   Y2, Y13, Y13
	MOVQ    R10, R13
	MOVQ    BX, R9
	TESTQ   R9, R9
	JZ      rowDone

entry:
	MOVLQSX (R12), AX
	VMULPD  (R13), Y1, Y3
	VMOVUPD (R8)(AX*8), Y4
	VSUBPD  Y3, Y4, Y4
	VMOVUPD Y4, (R8)(AX*8)
	ADDQ    $32, R13
	ADDQ    $4, R12
	DECQ    R9
	JNZ     entry

rowDone:
	ADDQ $32, R11
	DECQ DX
	JNZ  row

next:
	ADDQ $28, SI
	DECQ CX
	JNZ  step

done:
	VMOVMSKPD Y13, AX
	TESTL     AX, AX
	SETEQ     ret+32(FP)
	VZEROUPPER
	RET

// func forwardAVX(steps *laneStep, n int, index *int32, v, b *float64)
TEXT ·forwardAVX(SB), NOSPLIT, $0-40
	MOVQ  steps+0(FP), SI
	MOVQ  n+8(FP), CX
	MOVQ  index+16(FP), DI
	MOVQ  v+24(FP), R8
	MOVQ  b+32(FP), R9
	TESTQ CX, CX
	JZ    done

step:
	MOVLQSX 4(SI), AX            // row
	VMOVUPD (R9)(AX*8), Y0
	MOVLQSX 12(SI), BX
	MOVLQSX 16(SI), DX
	TESTQ   DX, DX
	JZ      next
	MOVLQSX 0(SI), R10
	MOVLQSX 20(SI), R11
	ADDQ    BX, R11
	LEAQ    (DI)(R11*4), R11
	SHLQ    $5, BX
	LEAQ    (R8)(R10*8), R10
	LEAQ    32(R10)(BX*1), R10

entry:
	MOVLQSX (R11), AX
	VMULPD  (R10), Y0, Y1
	VMOVUPD (R9)(AX*8), Y2
	VSUBPD  Y1, Y2, Y2
	VMOVUPD Y2, (R9)(AX*8)
	ADDQ    $32, R10
	ADDQ    $4, R11
	DECQ    DX
	JNZ     entry

next:
	ADDQ $28, SI
	DECQ CX
	JNZ  step

done:
	VZEROUPPER
	RET

// func backwardAVX(steps *laneStep, n int, index *int32, v, b, x *float64)
TEXT ·backwardAVX(SB), NOSPLIT, $0-48
	MOVQ  steps+0(FP), SI
	MOVQ  n+8(FP), CX
	MOVQ  index+16(FP), DI
	MOVQ  v+24(FP), R8
	MOVQ  b+32(FP), R9
	MOVQ  x+40(FP), R13
	TESTQ CX, CX
	JZ    done
	IMUL3Q $28, CX, AX
	LEAQ  -28(SI)(AX*1), SI      // last step

step:
	MOVLQSX 4(SI), AX
	VMOVUPD (R9)(AX*8), Y0       // even terms go here,
	VXORPD  Y3, Y3, Y3           // odd ones here
	MOVLQSX 0(SI), R10
	LEAQ    (R8)(R10*8), R10     // pivot
	MOVQ    R10, R12
	MOVLQSX 12(SI), DX
	MOVLQSX 20(SI), R11
	LEAQ    (DI)(R11*4), R11
	SUBQ    $2, DX
	JLT     rest

pair:
	MOVLQSX (R11), AX
	MOVLQSX 4(R11), BX
	VMOVUPD 32(R10), Y1
	VMOVUPD 64(R10), Y2
	VMULPD  (R13)(AX*8), Y1, Y1
	VMULPD  (R13)(BX*8), Y2, Y2
	VSUBPD  Y1, Y0, Y0
	VADDPD  Y2, Y3, Y3
	ADDQ    $64, R10
	ADDQ    $8, R11
	SUBQ    $2, DX
	JGE     pair

rest:
	ADDQ    $2, DX
	JZ      last
	MOVLQSX (R11), AX
	VMOVUPD 32(R10), Y1
	VMULPD  (R13)(AX*8), Y1, Y1
	VSUBPD  Y1, Y0, Y0

last:
	VSUBPD  Y3, Y0, Y0
	VMULPD  (R12), Y0, Y0
	MOVLQSX 8(SI), AX            // column
	VMOVUPD Y0, (R13)(AX*8)
	SUBQ    $28, SI
	DECQ    CX
	JNZ     step

done:
	VZEROUPPER
	RET

// func interleaveAVX(dst *float64, n int, a0, a1, a2, a3 *float64)
TEXT ·interleaveAVX(SB), NOSPLIT, $0-48
	MOVQ dst+0(FP), DI
	MOVQ n+8(FP), CX
	MOVQ a0+16(FP), R8
	MOVQ a1+24(FP), R9
	MOVQ a2+32(FP), R10
	MOVQ a3+40(FP), R11
	SUBQ $4, CX
	JLT  rest

four:
	VMOVUPD    (R8), Y0
	VMOVUPD    (R9), Y1
	VMOVUPD    (R10), Y2
	VMOVUPD    (R11), Y3
	VUNPCKLPD  Y1, Y0, Y4        // a00 a10 a02 a12
	VUNPCKHPD  Y1, Y0, Y5        // a01 a11 a03 a13
	VUNPCKLPD  Y3, Y2, Y6
	VUNPCKHPD  Y3, Y2, Y7
	VPERM2F128 $0x20, Y6, Y4, Y0
	VPERM2F128 $0x20, Y7, Y5, Y1
	VPERM2F128 $0x31, Y6, Y4, Y2
	VPERM2F128 $0x31, Y7, Y5, Y3
	VMOVUPD    Y0, (DI)
	VMOVUPD    Y1, 32(DI)
	VMOVUPD    Y2, 64(DI)
	VMOVUPD    Y3, 96(DI)
	ADDQ       $32, R8
	ADDQ       $32, R9
	ADDQ       $32, R10
	ADDQ       $32, R11
	ADDQ       $128, DI
	SUBQ       $4, CX
	JGE        four

rest:
	ADDQ $4, CX
	JZ   done

one:
	VMOVSD  (R8), X0
	VMOVHPD (R9), X0, X0
	VMOVSD  (R10), X1
	VMOVHPD (R11), X1, X1
	VMOVUPD X0, (DI)
	VMOVUPD X1, 16(DI)
	ADDQ    $8, R8
	ADDQ    $8, R9
	ADDQ    $8, R10
	ADDQ    $8, R11
	ADDQ    $32, DI
	DECQ    CX
	JNZ     one

done:
	VZEROUPPER
	RET

// func separateAVX(a0, a1, a2, a3 *float64, n int, src *float64)
TEXT ·separateAVX(SB), NOSPLIT, $0-48
	MOVQ a0+0(FP), R8
	MOVQ a1+8(FP), R9
	MOVQ a2+16(FP), R10
	MOVQ a3+24(FP), R11
	MOVQ n+32(FP), CX
	MOVQ src+40(FP), DI
	SUBQ $4, CX
	JLT  rest

four:
	VMOVUPD    (DI), Y0
	VMOVUPD    32(DI), Y1
	VMOVUPD    64(DI), Y2
	VMOVUPD    96(DI), Y3
	VUNPCKLPD  Y1, Y0, Y4
	VUNPCKHPD  Y1, Y0, Y5
	VUNPCKLPD  Y3, Y2, Y6
	VUNPCKHPD  Y3, Y2, Y7
	VPERM2F128 $0x20, Y6, Y4, Y0
	VPERM2F128 $0x20, Y7, Y5, Y1
	VPERM2F128 $0x31, Y6, Y4, Y2
	VPERM2F128 $0x31, Y7, Y5, Y3
	VMOVUPD    Y0, (R8)
	VMOVUPD    Y1, (R9)
	VMOVUPD    Y2, (R10)
	VMOVUPD    Y3, (R11)
	ADDQ       $32, R8
	ADDQ       $32, R9
	ADDQ       $32, R10
	ADDQ       $32, R11
	ADDQ       $128, DI
	SUBQ       $4, CX
	JGE        four

rest:
	ADDQ $4, CX
	JZ   done

one:
	VMOVUPD (DI), X0
	VMOVUPD 16(DI), X1
	VMOVSD  X0, (R8)
	VMOVHPD X0, (R9)
	VMOVSD  X1, (R10)
	VMOVHPD X1, (R11)
	ADDQ    $8, R8
	ADDQ    $8, R9
	ADDQ    $8, R10
	ADDQ    $8, R11
	ADDQ    $32, DI
	DECQ    CX
	JNZ     one

done:
	VZEROUPPER
	RET

// func combineTwoAVX(dst, acc, y, scale *float64, n int, ac *float64, u *[]float64, k int)
TEXT ·combineTwoAVX(SB), NOSPLIT, $0-64
	MOVQ dst+0(FP), DI
	MOVQ acc+8(FP), SI
	MOVQ y+16(FP), R8
	MOVQ n+32(FP), CX
	MOVQ ac+40(FP), R10
	MOVQ u+48(FP), R12
	MOVQ k+56(FP), R11
	XORQ BX, BX                  // byte offset into the vectors

four:
	VMOVUPD (R8)(BX*1), Y0
	VXORPD  Y1, Y1, Y1
	MOVQ    R11, DX
	MOVQ    R12, R13
	MOVQ    R10, R9

vector:
	MOVQ         (R13), AX
	VMOVUPD      (AX)(BX*1), Y2
	VBROADCASTSD (R9), Y3
	VBROADCASTSD 8(R9), Y4
	VMULPD       Y2, Y3, Y3
	VMULPD       Y2, Y4, Y4
	VADDPD       Y3, Y0, Y0
	VADDPD       Y4, Y1, Y1
	ADDQ         $24, R13
	ADDQ         $16, R9
	DECQ         DX
	JNZ          vector

	MOVQ    scale+24(FP), R9
	VMOVUPD Y0, (DI)(BX*1)
	VMULPD  (R9)(BX*1), Y1, Y1
	VMOVUPD Y1, (SI)(BX*1)
	ADDQ    $32, BX
	SUBQ    $4, CX
	JG      four
	VZEROUPPER
	RET

// func addAVX(dst, src *float64, n int)
TEXT ·addAVX(SB), NOSPLIT, $0-24
	MOVQ dst+0(FP), DI
	MOVQ src+8(FP), SI
	MOVQ n+16(FP), CX

four:
	VMOVUPD (DI), Y0
	VADDPD  (SI), Y0, Y0
	VMOVUPD Y0, (DI)
	ADDQ    $32, DI
	ADDQ    $32, SI
	SUBQ    $4, CX
	JG      four
	VZEROUPPER
	RET

// func pairUpdateAVX(work *float64, w *[4]float64, col *int32, u *float64, n int)
TEXT ·pairUpdateAVX(SB), NOSPLIT, $0-40
	MOVQ        work+0(FP), R8
	MOVQ        w+8(FP), R9
	MOVQ        col+16(FP), DI
	MOVQ        u+24(FP), SI
	MOVQ        n+32(FP), CX
	VMOVDDUP    (R9), X0
	VMOVDDUP    16(R9), X1
	VINSERTF128 $1, X1, Y0, Y0   // w0 w0 w2 w2
	VMOVDDUP    8(R9), X1
	VMOVDDUP    24(R9), X2
	VINSERTF128 $1, X2, Y1, Y1   // w1 w1 w3 w3

block:
	MOVLQSX        (DI), AX
	SHLQ           $5, AX
	VBROADCASTF128 (SI), Y2      // u0 u1 u0 u1
	VBROADCASTF128 16(SI), Y3    // u2 u3 u2 u3
	VMULPD         Y2, Y0, Y2
	VMULPD         Y3, Y1, Y3
	VMOVUPD        (R8)(AX*1), Y4
	VSUBPD         Y2, Y4, Y4
	VSUBPD         Y3, Y4, Y4
	VMOVUPD        Y4, (R8)(AX*1)
	ADDQ           $4, DI
	ADDQ           $32, SI
	DECQ           CX
	JNZ            block
	VZEROUPPER
	RET
