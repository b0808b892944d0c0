package solvers

import "golang.org/x/sys/cpu"

// useAVX tells whether the kernels in assembly run here.
var useAVX = cpu.X86.HasAVX2

// factorAVX is factorLanesGo, but goes to the end where a pivot is not
// acceptable.
//
//go:noescape
func factorAVX(steps *laneStep, n int, target *int32, v *float64) bool

// forwardAVX is forwardLanesGo.
//
//go:noescape
func forwardAVX(steps *laneStep, n int, index *int32, v, b *float64)

// backwardAVX is backwardLanesGo.
//
//go:noescape
func backwardAVX(steps *laneStep, n int, index *int32, v, b, x *float64)

// interleaveAVX is interleave.
//
//go:noescape
func interleaveAVX(dst *float64, n int, a0, a1, a2, a3 *float64)

// separateAVX is separate.
//
//go:noescape
func separateAVX(a0, a1, a2, a3 *float64, n int, src *float64)

// combineTwoAVX is combineTwoGo; n is rounded up to a multiple of four, and the
// vectors must reach that far. ac holds a[0], c[0], a[1], ..., u the k vectors.
//
//go:noescape
func combineTwoAVX(dst, acc, y, scale *float64, n int, ac *float64, u *[]float64, k int)

// addAVX adds src to dst; n and the vectors as for combineTwoAVX, n > 0.
//
//go:noescape
func addAVX(dst, src *float64, n int)

// pairUpdateAVX is pairUpdateGo; n > 0.
//
//go:noescape
func pairUpdateAVX(work *float64, w *[4]float64, col *int32, u *float64, n int)
