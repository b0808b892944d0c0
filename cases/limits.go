package cases

// Limits on the size of a case, so that a hostile file is refused before it
// costs memory or time. They lie far above what a study needs.
const (
	MaxBytes   = 1 << 20 // of a file
	MaxBuses   = 5000
	MaxDevices = 10000
	MaxEvents  = 2000 // events and conditions together
	MaxName    = 64   // bytes of a name
	MaxString  = 4096 // bytes of any other string
	MaxEntries = 100  // of a list, and of detail rules
	MaxNumbers = 1000 // of a list of numbers, or of buses of a reduced network

	maxKeys     = 200000 // keys and tables of a file
	maxNesting  = 8      // parts of a key; arrays and inline tables within each other
	maxReported = 100    // faults told one by one
)
