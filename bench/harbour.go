package bench

import (
	"islet/cases"
	"islet/engine"
)

// HarbourStudy is the shipped harbour case over its whole time.
func HarbourStudy() Study {
	return Study{
		Name:   "harbour",
		Signal: "mainland.v",
		Until:  2.5,
		Start: func(o *engine.Options) (*engine.Simulation, error) {
			c, err := cases.Open("harbour")
			if err != nil {
				return nil, err
			}
			return c.Start(o)
		},
	}
}
