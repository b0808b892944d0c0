package cases

import "islet/solvers/facet"

// busChannels and terminalChannels are what the engine offers of every bus and
// terminal (TestChannelsAreTheEngines compares).
var (
	busChannels = []facet.Channel{
		{Name: "v", Unit: "V line-line rms"}, {Name: "frequency", Unit: "Hz"}, {Name: "angle", Unit: "deg"},
		{Name: "v_d", Unit: "V peak phase"}, {Name: "v_q", Unit: "V peak phase"},
		{Name: "v_a", Unit: "V"}, {Name: "v_b", Unit: "V"}, {Name: "v_c", Unit: "V"},
	}
	terminalChannels = []facet.Channel{
		{Name: "i_d", Unit: "A peak into the device"}, {Name: "i_q", Unit: "A peak into the device"},
		{Name: "i_a", Unit: "A into the device"}, {Name: "i_b", Unit: "A into the device"}, {Name: "i_c", Unit: "A into the device"},
	}
)

// channels lists all channels of the case with their units.
func (l *loader) channels() {
	l.channel = make(map[string]string)
	add := func(name, unit string) {
		if _, ok := l.channel[name]; !ok {
			l.names = append(l.names, name)
			l.channel[name] = unit
		}
	}
	for _, b := range l.c.buses {
		for _, c := range busChannels {
			add(b.name+"."+c.Name, c.Unit)
		}
	}
	for i, s := range l.c.devices {
		dev := l.built[i]
		if dev == nil {
			continue
		}
		if m, ok := dev.(facet.Measurer); ok {
			for _, c := range m.Channels() {
				add(s.name+"."+c.Name, c.Unit)
			}
		}
		desc := dev.Describe()
		for _, u := range desc.Unknowns {
			add(s.name+"."+u.Name, u.Unit)
		}
		for _, t := range desc.Terminals {
			for _, c := range terminalChannels {
				add(s.name+"."+t.Name+"."+c.Name, c.Unit)
			}
		}
	}
}
