package cases

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"strings"
)

// Bounds of the generated cases; larger ones would pass the limits of a file.
const (
	meshLeast = 4
	meshMost  = 4000
)

// meshSize reads the N of a name "mesh-N".
func meshSize(name string) (n int, ok bool) {
	digits, ok := strings.CutPrefix(name, "mesh-")
	if !ok {
		return 0, false
	}
	n, err := strconv.Atoi(digits)
	return n, err == nil && n >= meshLeast && n <= meshMost && digits == strconv.Itoa(n)
}

// meshSource writes the case "mesh-N": an islanded 400 V microgrid of n
// inverters, invented, the same for the same n. The rule:
//
//   - Four inverters of 20 to 50 kVA a bus, in turn: of every ten, seven form
//     the grid, by droop, as a virtual machine and as an oscillator in turn, and
//     three follow it. All start at half their rating.
//   - The buses lie in a square, row by row, each tied to its neighbours by a
//     cable of 100 to 300 m, 0.2 + j0.08 ohm/km.
//   - At every bus a parallel load of 60 % of what its formers can give in full
//     and its followers at half, with a quarter of that in vars.
//   - Events: eight load steps, one every 1.8 s from 0.5 s on, at buses seven
//     apart: a load gains 40 % of its power and gives it back 1.8 s later; in
//     between, two changes of a follower's power, one of a former's, and the trip
//     of a follower.
func meshSource(n int) []byte {
	rng := rand.New(rand.NewPCG(7, uint64(n)))
	var b bytes.Buffer
	p := func(format string, a ...any) { fmt.Fprintf(&b, format, a...) }
	buses := (n + 3) / 4
	p("# mesh-%d: %d inverters at %d buses in a square mesh, made by the rule in cases/mesh.go.\n\n", n, n, buses)
	p("[study]\ntitle = \"Generated mesh of %d inverters\"\n", n)
	p("text = \"Droop, virtual machines, oscillators and followers on short cables; load steps, setpoint steps and a trip.\"\n")
	p("until_s = 15\nsample_ms = 5\n")
	capacity := make([]float64, buses)
	var devices bytes.Buffer
	d := func(format string, a ...any) { fmt.Fprintf(&devices, format, a...) }
	controls := []string{"droop", "virtual machine", "oscillator"}
	formers := 0
	var follower, former []string
	for k := range n {
		bus := k % buses
		kva := math.Round(10*(20+30*rng.Float64())) / 10
		if k%10 < 7 {
			name := fmt.Sprintf("former-%d", k)
			d("[device.%s]\nkind = \"grid-forming inverter\"\nbus = \"bus-%d\"\npower_kVA = %g\np_kW = %g\ncontrol = %q\n", name, bus, kva, kva/2, controls[formers%3])
			formers++
			capacity[bus] += kva
			former = append(former, name)
			continue
		}
		name := fmt.Sprintf("follower-%d", k)
		d("[device.%s]\nkind = \"grid-following inverter\"\nbus = \"bus-%d\"\npower_kVA = %g\np_kW = %g\n", name, bus, kva, kva/2)
		capacity[bus] += kva / 2
		follower = append(follower, name)
	}
	width := int(math.Ceil(math.Sqrt(float64(buses))))
	cable := func(a, c int) {
		d("[device.cable-%d-%d]\nkind = \"line\"\nfrom = \"bus-%d\"\nto = \"bus-%d\"\nresistance_ohm_per_km = 0.2\ninductance_mH_per_km = 0.25\nlength_m = %.0f\n", a, c, a, c, 100+200*rng.Float64())
	}
	load := make([]float64, buses)
	for k := range buses {
		p("\n[bus.bus-%d]\nvoltage_kV = 0.4\n", k)
		if k+1 < buses && (k+1)%width != 0 {
			cable(k, k+1)
		}
		if k+width < buses {
			cable(k, k+width)
		}
		load[k] = math.Round(6*capacity[k]) / 10
		d("[device.load-%d]\nkind = \"load\"\nbus = \"bus-%d\"\npower_kW = %g\nreactive_kvar = %g\n", k, k, load[k], load[k]/4)
	}
	p("\n%s", devices.String())
	event := func(name string, at float64, device, setpoint string, kw float64) {
		p("[event.%s]\nat_s = %g\naction = \"set\"\ndevice = %q\nsetpoint = %q\nvalue_kW = %g\n", name, at, device, setpoint, math.Round(100*kw)/100)
	}
	for k := range 8 {
		at, bus := math.Round(100*(0.5+1.8*float64(k)))/100, k/2*7%buses
		if k%2 == 0 {
			event(fmt.Sprintf("load-up-%d", k/2), at, fmt.Sprintf("load-%d", bus), "p", 1.4*load[bus])
		} else {
			event(fmt.Sprintf("load-down-%d", k/2), at, fmt.Sprintf("load-%d", bus), "p", load[bus])
		}
		if len(follower) > 0 {
			switch k {
			case 1:
				event("follower-down", at+0.6, follower[0], "p", 5)
			case 3:
				event("follower-up", at+0.6, follower[0], "p", 12)
			case 7:
				p("[event.follower-trips]\nat_s = %g\naction = \"trip\"\ndevice = %q\n", at+0.6, follower[len(follower)-1])
			}
		}
		if k == 5 {
			event("former-down", at+0.6, former[0], "p", 5)
		}
	}
	return b.Bytes()
}
