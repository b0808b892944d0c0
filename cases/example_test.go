package cases_test

import (
	"context"
	"fmt"

	"islet/cases"
)

// A shipped case, with one value changed and one cable reduced to a phasor
// model.
func Example() {
	c, err := cases.Open("starter", cases.Override{Path: "event.machines-start.value_kW", Value: "40"})
	if err != nil {
		fmt.Println(err)
		return
	}
	sim, err := c.Start(nil, cases.DetailRule{Pattern: "cable", Level: "quasi-steady"})
	if err != nil {
		fmt.Println(err)
		return
	}
	trace, err := sim.Run(context.Background(), c.Until)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%s: %.2f Hz, then %.2f Hz\n", c.Title, trace.At("office.frequency", 0), trace.At("office.frequency", c.Until))
	// Output: Two inverters share a load: 49.80 Hz, then 49.72 Hz
}

// What is wrong with a file is told all at once, with place and remedy.
func ExampleParse() {
	_, err := cases.Parse("site.toml", []byte(`
[study]
until_s = 1
[bus.quay]
voltage_kV = 0.4
[device.battery]
kind = "grid-forming inverter"
bus = "quai"
power_kW = 100
`))
	fmt.Println(err)
	// Output:
	// site.toml:6: device.battery: a grid-forming inverter needs power_kVA (rating), more than 0, up to 1e7
	// site.toml:8: device.battery.bus = "quai": no bus of that name; did you mean quay?
	// site.toml:9: device.battery.power_kW = 100: unknown key of a grid-forming inverter; did you mean power_kVA?
}
