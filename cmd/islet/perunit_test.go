package main

import (
	"strings"
	"testing"
)

func TestPerunit(t *testing.T) {
	want(t, exitOK, []string{
		"battery-1 (grid-forming inverter): base 60 kVA", "K_ic             3351.032 ohm/s = 1/F            1256.637", "V_0              326.5986 V                             1", "it has no rating of its own",
	}, "perunit", "starter")
	want(t, exitOK, []string{"time in radians", "K_i/V_n          12.08775 rad/(Wb s)                 0.04", "L_f          0.0004629962 H                           0.1"},
		"perunit", "harbour", "--device", "solar-yard", "--time", "radian")
	// A maker's per-unit gains into SI, and back.
	out := want(t, exitOK, []string{"for the case file", "[device.battery-1]", "Kpc = 0.9333333333", "Kic = 32"}, "perunit", "starter", "--device", "battery-1", "--from", "Kpc=0.35,Kic=12")
	if strings.Contains(out, "L_f") {
		t.Errorf("more than was asked for:\n%s", out)
	}
	want(t, exitOK, []string{"K_pc            0.9333333 ohm                        0.35"}, "perunit", "starter", "--device", "battery-1", "--set", "device.battery-1.Kpc=0.9333333333")
	// Another base of the current reference moves K_pv and K_aw, and no filter.
	want(t, exitOK, []string{"K_pv              0.09375 S                      30.61862", "L_f          0.0008488264 H                  0.0003183099"}, "perunit", "starter", "--device", "battery-1", "--base", "i_ref=1")
	// Speed per unit of its nominal value: droop as makers give it, and what a case
	// shows of its signals and of elements without controls.
	want(t, exitOK, []string{"1 per unit of its control signals: w 314.159 rad/s, v_ref 326.599 V", "m            5.235988e-05 rad/(W s)                  0.01  frequency droop"},
		"perunit", "starter", "--base", "w=314.1592653589793")
	want(t, exitOK, []string{"m = 0.0001047197551"}, "perunit", "starter", "--device", "battery-1", "--base", "w=314.1592653589793", "--from", "m=0.02")
	want(t, exitOK, []string{"tie (breaker)", "resistance of the closed contacts", "capacitor-bank (shunt capacitor)", "grid-meter (frequency meter)"}, "perunit", "harbour")
	if out := want(t, exitOK, nil, "perunit", "starter", "--csv"); !strings.HasPrefix(out, "device,symbol,key,si_value,unit,per_unit,base\n") {
		t.Errorf("as CSV:\n%s", out)
	}
	for text, args := range map[string][]string{
		"want second or radian":   {"--time", "hour"},
		"no device of that name":  {"--device", "nobody"},
		"one of the signals":      {"--base", "i_x=3"},
		"want KEY=VALUE":          {"--from", "Kpc"},
		"have no parameter Kxx":   {"--from", "Kxx=1"},
		"want positive values":    {"--power-base", "-3"},
		"--base \"i_ref=0\"":      {"--base", "i_ref=0"},
		"syntax error in pattern": {"--device", "["},
	} {
		want(t, exitUsage, []string{text}, append([]string{"perunit", "starter"}, args...)...)
	}
}
