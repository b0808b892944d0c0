// Package cases reads case files and ships some. A case file is a study in
// TOML: buses, devices, events, and what to record. [Open] reads one, shipped or
// one's own, and [Case.Start] makes a simulation of it:
//
//	c, err := cases.Open("starter", cases.Override{Path: "study.until_s", Value: "1"})
//	sim, err := c.Start(nil, cases.DetailRule{Pattern: "line-*", Level: "quasi-steady"})
//	trace, err := sim.Run(ctx, c.Until)
//
// # Files
//
// A file is TOML 1.0 with named tables alone: [study], [bus.NAME], [device.NAME]
// with a kind, [event.NAME], [condition.NAME], and [detail] with levels of detail
// by device. Tables keep the order of the file: buses and devices are added, and
// events at one time happen, in the order in which they stand. Keys in trade
// units end in the unit (voltage_kV, length_m); keys named after a symbol of the
// equations in package devices are in SI and replace what the nameplate gives,
// so that a published network can be entered as printed. [Reference] prints all
// keys with units, defaults and accepted ranges.
//
// The rated current of a line or fault that gives none is what all sources and
// transformers can supply that feed its part of the network, which is the set of
// buses that lines and breakers, open or closed, tie to its own: the sum of
// inverters' and transformers' ratings and of what grids are rated at, over
// sqrt(3) V. It is the base of the current's error norm.
//
// # Smaller cases
//
// [Shrink] takes buses without injection out of a case's text and puts reduced
// networks in their place, exactly or, if asked, by plain lines.
//
// # Errors
//
// A file is read strictly: unknown keys and names (with the nearest known one),
// wrong types, values out of range, names used twice, buses that nothing is
// connected to, islands without a source, events of devices, setpoints and
// channels that don't exist. All faults are reported at once, each as a [*Fault]
// with file, line, key, value, and what would be accepted. Files beyond the
// limits of this package (MaxBytes and the others) are refused.
package cases
