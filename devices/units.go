package devices

import "math"

// This file is the one place where nameplate units become SI. The relations
// are the definitions of balanced three-phase quantities and of the per-unit
// system, found in any power-system text, e.g. J. J. Grainger, W. D. Stevenson,
// Power System Analysis, McGraw-Hill 1994, sections 1.5 to 1.10 (section
// numbers from memory).

// PeakVolts returns the peak phase-to-neutral voltage of a line-to-line rms
// voltage: sqrt(2/3) V.
func PeakVolts(lineRMS float64) float64 { return lineRMS * math.Sqrt(2.0/3) }

// LineVolts returns the line-to-line rms voltage of a peak phase-to-neutral
// voltage, the inverse of [PeakVolts].
func LineVolts(peak float64) float64 { return peak * math.Sqrt(1.5) }

// PeakAmperes returns the peak of an rms current.
func PeakAmperes(rms float64) float64 { return rms * math.Sqrt2 }

// RMSAmperes returns the rms of a peak current.
func RMSAmperes(peak float64) float64 { return peak / math.Sqrt2 }

// RatedAmperes returns the rms line current of a three-phase rating:
// S / (sqrt(3) V), with va in VA and lineRMS in V line to line.
func RatedAmperes(va, lineRMS float64) float64 { return va / (math.Sqrt(3) * lineRMS) }

// BaseOhms returns the base impedance V^2/S per phase, with lineRMS in V line
// to line and va the three-phase VA. The same formula is the impedance that
// draws va at that voltage.
func BaseOhms(lineRMS, va float64) float64 { return lineRMS * lineRMS / va }

// RadPerSecond returns the angular frequency of hertz.
func RadPerSecond(hertz float64) float64 { return 2 * math.Pi * hertz }

// Hertz returns the frequency of an angular frequency in rad/s.
func Hertz(radPerSecond float64) float64 { return radPerSecond / (2 * math.Pi) }

// SplitXR splits an impedance magnitude (ohm, or per unit) into resistance and
// reactance with the ratio xr = X/R: R = Z / sqrt(1 + xr^2), X = xr R. An
// infinite xr gives R = 0.
func SplitXR(z, xr float64) (r, x float64) {
	if math.IsInf(xr, 1) {
		return 0, z
	}
	r = z / math.Hypot(1, xr)
	return r, xr * r
}

// Henries returns the inductance of the reactance x (ohm) at hertz.
func Henries(x, hertz float64) float64 { return x / RadPerSecond(hertz) }

// FaradsFromVars returns the capacitance per phase (star connection) of a
// bank that delivers vars (three-phase) at lineRMS V line to line and hertz:
// C = Q / (omega V^2).
func FaradsFromVars(vars, lineRMS, hertz float64) float64 {
	return vars / (RadPerSecond(hertz) * lineRMS * lineRMS)
}
