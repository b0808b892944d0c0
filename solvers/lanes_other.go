//go:build !amd64

package solvers

// useAVX tells whether the kernels in assembly run here.
const useAVX = false

func factorAVX(*laneStep, int, *int32, *float64) bool                           { panic("no AVX") }
func forwardAVX(*laneStep, int, *int32, *float64, *float64)                     { panic("no AVX") }
func backwardAVX(*laneStep, int, *int32, *float64, *float64, *float64)          { panic("no AVX") }
func interleaveAVX(*float64, int, *float64, *float64, *float64, *float64)       { panic("no AVX") }
func separateAVX(*float64, *float64, *float64, *float64, int, *float64)         { panic("no AVX") }
func combineTwoAVX(_, _, _, _ *float64, _ int, _ *float64, _ *[]float64, _ int) { panic("no AVX") }
func addAVX(_, _ *float64, _ int)                                               { panic("no AVX") }
func pairUpdateAVX(*float64, *[4]float64, *int32, *float64, int)                { panic("no AVX") }
