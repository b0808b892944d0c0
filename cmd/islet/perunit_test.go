package main

import (
	"strings"
	"testing"
)

// rows runs islet perunit and checks lines of its output, spaces apart.
func rows(t *testing.T, lines []string, args ...string) string {
	t.Helper()
	out := want(t, exitOK, nil, append([]string{"perunit"}, args...)...)
	all := strings.Join(strings.Fields(out), " ")
	for _, l := range lines {
		if !strings.Contains(all, l) {
			t.Errorf("islet perunit %s: lacks %q:\n%s", strings.Join(args, " "), l, out)
		}
	}
	return out
}

func TestPerunit(t *testing.T) {
	rows(t, []string{
		"base frequency 50 Hz, time in seconds", "battery-1 (grid-forming inverter) base 60 kVA, 326.599 V peak phase (400 V line-to-line), 122.474 A peak, 2.66667 ohm",
		"K_ic 3351.032 ohm/s = 1/F 1256.637", "V_0 326.5986 V 1", "n 0.0001088662 V/var 0.02", "it has no rating of its own",
		// Droop as makers give it, per unit of nominal speed.
		"1 per unit of its control signals: w 314.159 rad/s, v_ref 326.599 V", "w_0 314.1593 rad/s 1", "m 5.235988e-05 rad/(W s) 0.01 frequency droop",
	}, "starter")
	rows(t, []string{"time in radians (1 is 3.1831 ms)", "K_i/V_n 12.08775 rad/(Wb s) 0.04", "L_f 0.0004629962 H 0.1"}, "harbour", "--device", "solar-yard", "--time", "radian")
	rows(t, []string{"I_max none A none"}, "droop3")
	// A maker's per-unit gains into SI, and back; devices that lack them stay away.
	out := rows(t, []string{"for the case file", "[device.battery-1] Kpc = 0.9333333333", "Kic = 32"}, "starter", "--from", "Kpc=0.35,Kic=12")
	if strings.Contains(out, "L_f") || strings.Contains(out, "cable") || strings.Contains(out, "note") {
		t.Errorf("more than was asked for:\n%s", out)
	}
	rows(t, []string{"K_pc 0.9333333 ohm 0.35"}, "starter", "--device", "battery-1", "--set", "device.battery-1.Kpc=0.9333333333")
	rows(t, []string{"m = 0.0001047197551"}, "starter", "--device", "battery-1", "--from", "m=0.02")
	// A reactance given with time in seconds is warned of, and right in radians.
	rows(t, []string{"note: with time in seconds Lf_H = 0.08 per unit is that many seconds"}, "starter", "--device", "battery-1", "--from", "Lf_H=0.08")
	if out := rows(t, []string{"Lf_H = 0.00067906109"}, "starter", "--device", "battery-1", "--from", "Lf_H=0.08", "--time", "radian"); strings.Contains(out, "note") {
		t.Errorf("warns without need:\n%s", out)
	}
	// Other bases of the current reference and of speed move the gains at their ends,
	// and no filter.
	rows(t, []string{"K_pv 0.09375 S 30.61862", "L_f 0.0008488264 H 0.0003183099"}, "starter", "--device", "battery-1", "--base", "i_ref=1")
	rows(t, []string{"m 5.235988e-05 rad/(W s) 3.141593"}, "starter", "--device", "battery-1", "--base", "w=1")
	// Bases common to all devices, by level: 33/11 kV is 1 under matching bases, and
	// 1.1 with 30 kV for base at the high side. 10 MVA at 11 kV is 12.1 ohm.
	rows(t, []string{"base 10000 kVA, 8981.46 V peak phase (11000 V line-to-line), 742.27 A peak, 12.1 ohm; high side 26944.4 V", "ratio 3 1 1 turns ratio", "shift 0.5235988 rad"},
		"harbour", "--device", "landing-transformer", "--power-base", "10000")
	rows(t, []string{"high side 24494.9 V peak phase (30000 V line-to-line)", "ratio 3 1 1.1 turns ratio"}, "harbour", "--device", "landing-transformer", "--voltage-base", "33=30", "--voltage-base", "11=11")
	rows(t, []string{"(380 V line-to-line)"}, "starter", "--voltage-base", "0.38")
	rows(t, []string{"base frequency 60 Hz", "w_0 314.1593 rad/s 0.8333333"}, "starter", "--device", "battery-1", "--frequency-base", "60")
	rows(t, []string{"tie (breaker)", "resistance of the closed contacts", "capacitor-bank (shunt capacitor)", "grid-meter (frequency meter)"}, "harbour")
	rows(t, []string{"2 H S_r/w_0 262.2873 W s^2/rad 4", "D 6557.184 W s/rad 100"}, "mesh-10", "--device", "former-1")
	if out := want(t, exitOK, nil, "perunit", "starter", "--csv"); !strings.HasPrefix(out, "device,symbol,key,si_value,unit,per_unit,base\n") {
		t.Errorf("as CSV:\n%s", out)
	}
	for text, args := range map[string][]string{
		"want second or radian":            {"--time", "hour"},
		"no device of that name":           {"--device", "nobody"},
		"one of the signals":               {"--base", "i_x=3"},
		"want KEY=VALUE":                   {"--from", "Kpc"},
		"have no parameter K, Kxx; they ":  {"--from", "Kxx=1,m=0.02,K=2"},
		"\"m=inf\": want KEY=VALUE with a": {"--from", "m=inf"},
		"\"=3\": want KEY=VALUE":           {"--from", "=3"},
		"m is given twice":                 {"--from", "m=0.02", "--from", "m=0.03"},
		"--power-base -3: want a positive": {"--power-base", "-3"},
		"--frequency-base NaN: want":       {"--frequency-base", "NaN"},
		"--base \"i_ref=0\"":               {"--base", "i_ref=0"},
		"the devices shown are at 0.4 kV":  {"--voltage-base", "11=11"},
		"with a positive value":            {"--voltage-base", "0.4=-1"},
		"syntax error in pattern":          {"--device", "["},
	} {
		out := want(t, exitUsage, []string{text}, append([]string{"perunit", "starter"}, args...)...)
		if strings.Contains(out, "base frequency") {
			t.Errorf("%v: part of a report before the fault:\n%s", args, out)
		}
	}
	want(t, exitUsage, []string{"at 0.4, 11, 33 kV; say which with LEVEL=kV"}, "perunit", "harbour", "--voltage-base", "3")
}
