package cases

import (
	"reflect"
	"strconv"
	"strings"
	"testing"

	"islet/engine"
)

// bases holds, for each kind, tables that keys can be added to: the first
// whose additions are accepted counts.
var bases = map[string][]string{
	"grid":                    {"short_circuit_MVA = 10"},
	"grid-forming inverter":   {"power_kVA = 10", "power_kVA = 10\ncontrol = \"virtual machine\"", "power_kVA = 10\ncontrol = \"oscillator\"", "power_kVA = 10\nlimit_threshold_percent = 120"},
	"grid-following inverter": {"power_kVA = 10"},
	"line":                    {"length_m = 100\nresistance_ohm_per_km = 0.2\nreactance_ohm_per_km = 0.1", "length_m = 100\nR_ohm = 1\nL_H = 1e-3"},
	"transformer":             {"power_kVA = 10\nimpedance_percent = 4\nx_over_r = 3\nno_load_current_percent = 1\nno_load_loss_kW = 0.05", "power_kVA = 10\nimpedance_percent = 4\nx_over_r = 3"},
	"breaker":                 {""},
	"reduced network":         {"R_ohm = [1]\nL_H = [1e-3]\ndrive = [[1, -1]]"},
	"load":                    {"power_kW = 10\nreactive_kvar = 3", "power_kW = 10", "reactive_kvar = -3"},
	"series load":             {"power_kW = 10"},
	"shunt capacitor":         {"reactive_kvar = 10"},
	"fault":                   {""},
	"frequency meter":         {""},
}

// one builds the device of a table and returns its parameters.
func one(kind, table string) (any, error) {
	k := findKind(kinds(), kind)
	ends := "bus = \"a\""
	if len(k.terminals) == 2 {
		ends = "from = \"a\"\nto = \"b\""
	} else if k.many() {
		ends = "buses = [\"a\", \"b\"]"
	}
	src := "[study]\nuntil_s = 1\n[bus.a]\nvoltage_kV = 0.4\n[bus.b]\nvoltage_kV = 0.4\n" +
		"[device.g]\nkind = \"grid\"\nbus = \"a\"\nshort_circuit_MVA = 1\n[device.l]\nkind = \"line\"\nfrom = \"a\"\nto = \"b\"\nR_ohm = 1\n" +
		"[device.x]\nkind = \"" + kind + "\"\n" + ends + "\n" + table + "\n"
	c, err := Parse("x", []byte(src))
	if err != nil {
		return nil, err
	}
	var dev engine.Device
	for i := range c.devices {
		if c.devices[i].name == "x" {
			if dev, err = c.devices[i].build(); err != nil {
				return nil, err
			}
		}
	}
	return reflect.ValueOf(dev).MethodByName("Params").Call(nil)[0].Interface(), nil
}

// Each default that the reference states as a value is what the device has
// when the key isn't given.
func TestDefaultsAreAsStated(t *testing.T) {
	checked := 0
	for _, k := range kinds() {
		for _, info := range k.infos {
			value := info.def
			switch {
			case info.form == number:
				if _, err := strconv.ParseFloat(value, 64); err != nil {
					continue
				}
			case info.form == text && len(info.choices) > 0 || info.name == "vector_group":
				value = strconv.Quote(value)
			case info.form == flag:
			default:
				continue
			}
			var errs []string
			done := false
			for _, base := range bases[k.name] {
				want, err := one(k.name, base)
				if err != nil {
					t.Fatalf("%s: %v", k.name, err)
				}
				if strings.Contains("\n"+base, "\n"+info.name+" = ") {
					continue
				}
				got, err := one(k.name, base+"\n"+info.name+" = "+value)
				if err != nil {
					errs = append(errs, err.Error())
					continue
				}
				done = true
				checked++
				if !reflect.DeepEqual(got, want) {
					t.Errorf("%s: with %s = %s\n%+v\nwithout\n%+v", k.name, info.name, value, got, want)
				}
			}
			if !done {
				t.Errorf("%s: %s = %s is not accepted: %s", k.name, info.name, value, strings.Join(errs, "; "))
			}
		}
	}
	if checked < 60 {
		t.Errorf("only %d defaults checked", checked)
	}
}

// An explicit symbol reaches the parameters as it stands, whatever the
// nameplate says.
func TestSymbolsAreTakenAsTheyStand(t *testing.T) {
	for _, c := range []struct{ kind, table, path string }{
		{"grid-forming inverter", "V_0", "V0"}, {"grid-forming inverter", "w_0", "Omega0"}, {"grid-forming inverter", "m", "Primary.M"},
		{"grid-forming inverter", "n", "Primary.N"}, {"grid-forming inverter", "w_c", "Primary.OmegaC"}, {"grid-forming inverter", "psi", "Primary.Psi"},
		{"grid-forming inverter", "Rv_ohm", "Rv"}, {"grid-forming inverter", "Xv_ohm", "Xv"}, {"grid-forming inverter", "Kpv", "Kpv"},
		{"grid-forming inverter", "Kiv", "Kiv"}, {"grid-forming inverter", "Kpc", "Kpc"}, {"grid-forming inverter", "Kic", "Kic"},
		{"grid-forming inverter", "Kaw", "Kaw"}, {"grid-forming inverter", "F", "F"}, {"grid-forming inverter", "I_max_A", "IMax"},
		{"grid-forming inverter", "Lf_H", "Filter.Lf"}, {"grid-forming inverter", "Rf_ohm", "Filter.Rf"}, {"grid-forming inverter", "Cf_F", "Filter.Cf"},
		{"grid-forming inverter", "Lg_H", "Filter.Lg"}, {"grid-forming inverter", "Rg_ohm", "Filter.Rg"},
		{"grid-forming inverter", "limit_I_t_A", "LimitImpedance.Threshold"}, {"grid-forming inverter", "limit_k", "LimitImpedance.Gain"}, {"grid-forming inverter", "limit_XR", "LimitImpedance.XR"},
		{"grid-forming inverter", "control = \"virtual machine\"\nH", "Primary.H"}, {"grid-forming inverter", "control = \"virtual machine\"\nD", "Primary.D"},
		{"grid-forming inverter", "control = \"virtual machine\"\nT_v", "Primary.Tv"}, {"grid-forming inverter", "control = \"virtual machine\"\nn", "Primary.N"},
		{"grid-forming inverter", "control = \"virtual machine\"\nw_c", "Primary.OmegaC"}, {"grid-forming inverter", "control = \"virtual machine\"\npsi", "Primary.Psi"},
		{"grid-forming inverter", "control = \"oscillator\"\neta", "Primary.Eta"}, {"grid-forming inverter", "control = \"oscillator\"\nalpha", "Primary.Alpha"}, {"grid-forming inverter", "control = \"oscillator\"\npsi", "Primary.Psi"},
		{"grid-following inverter", "w_0", "Omega0"}, {"grid-following inverter", "Kp", "Kp"}, {"grid-following inverter", "Ki", "Ki"},
		{"grid-following inverter", "w_limit", "SpeedLimit"}, {"grid-following inverter", "w_v", "OmegaV"}, {"grid-following inverter", "v_floor", "VFloor"},
		{"grid-following inverter", "Kpc", "Kpc"}, {"grid-following inverter", "Kic", "Kic"}, {"grid-following inverter", "Kff", "Kff"},
		{"grid-following inverter", "I_max_A", "IMax"}, {"grid-following inverter", "Lf_H", "Filter.Lf"}, {"grid-following inverter", "Rf_ohm", "Filter.Rf"},
		{"grid-following inverter", "Cf_F", "Filter.Cf"}, {"grid-following inverter", "Lg_H", "Filter.Lg"}, {"grid-following inverter", "Rg_ohm", "Filter.Rg"},
		{"grid", "R_ohm", "R"}, {"grid", "L_H", "L"},
		{"line", "R_ohm", "R"}, {"line", "L_H", "L"}, {"line", "C_F", "C"}, {"line", "rated_current_A", "RatedCurrent"},
		{"transformer", "R_ohm", "R"}, {"transformer", "L_H", "L"}, {"transformer", "core_R_ohm", "CoreR"}, {"transformer", "magnetising_L_H", "MagnetisingL"}, {"transformer", "magnetising_R_ohm", "MagnetisingR"},
		{"breaker", "R_ohm", "Resistance"},
		{"load", "R_ohm", "R"}, {"load", "L_H", "L"}, {"load", "RL_ohm", "RL"}, {"load", "C_F", "C"},
		{"series load", "R_ohm", "R"}, {"series load", "L_H", "L"},
		{"shunt capacitor", "C_F", "C"}, {"shunt capacitor", "R_ohm", "R"},
		{"fault", "R_ohm", "R"}, {"fault", "L_H", "L"}, {"fault", "rated_current_A", "RatedCurrent"},
	} {
		const x = 0.123456789012345
		p, err := one(c.kind, bases[c.kind][0]+"\n"+c.table+" = 0.123456789012345")
		if err != nil {
			t.Errorf("%s, %s: %v", c.kind, c.table, err)
			continue
		}
		v := reflect.ValueOf(p)
		for _, f := range strings.Split(c.path, ".") {
			if v.Kind() == reflect.Interface {
				v = v.Elem()
			}
			v = v.FieldByName(f)
		}
		if got := v.Float(); got != x {
			t.Errorf("%s, %s: %s is %.17g, want %.17g", c.kind, c.table, c.path, got, x)
		}
	}
}

// Gains that aren't given follow the filter that is (their formulas: see
// devices.GridFormingNameplate): an explicit filter equal to that of another
// nameplate gives that nameplate's gains.
func TestGainsFollowTheFilter(t *testing.T) {
	of := func(table, field string) float64 {
		t.Helper()
		p, err := one("grid-forming inverter", "power_kVA = 10\n"+table)
		if err != nil {
			t.Fatal(err)
		}
		return reflect.ValueOf(p).FieldByName(field).Float()
	}
	// 0.2 of 16 ohm at 50 Hz, and 0.08 of 1/16 S.
	const explicit = "Lf_H = 0.010185916357881302\nCf_F = 1.5915494309189535e-05"
	for _, g := range []string{"Kpc", "Kic", "Kpv", "Kiv", "Kaw"} {
		a, b := of("Lf_percent = 20\nCf_percent = 8", g), of(explicit, g)
		if d := a/b - 1; d > 1e-12 || d < -1e-12 {
			t.Errorf("%s is %g by the nameplate and %g by the explicit filter", g, a, b)
		}
	}
}

func TestReference(t *testing.T) {
	all, err := Reference("")
	if err != nil {
		t.Fatal(err)
	}
	for _, k := range kinds() {
		text, err := Reference(strings.ReplaceAll(k.name, "-", " "))
		if err != nil || !strings.Contains(all, text) {
			t.Errorf("%s: %v", k.name, err)
		}
		seen := make(map[string]bool)
		for _, i := range k.infos {
			if seen[i.name] || i.doc == "" || !strings.Contains(text, "\n  "+i.name+" ") {
				t.Errorf("%s: %s is not there, is there twice, or says nothing", k.name, i.name)
			}
			seen[i.name] = true
		}
	}
	for _, s := range sections {
		if text, err := Reference(s); err != nil || !strings.Contains(all, text) {
			t.Errorf("%s: %v", s, err)
		}
	}
	if _, err := Reference("lien"); err == nil || err.Error() != `cases: no kind of device or table "lien"; did you mean "line"?` {
		t.Errorf("got %v", err)
	}
}
