package plant

import (
	"math"

	"midwatch/configs"
)

// special marks the loops that are more than a controller on a process.
type special uint8

const (
	plain       special = iota
	outer               // its OP is the SP of the loop named by with
	inner               // its SP is the OP of the loop named by with
	flowPaced           // OP = trim x flow of the loop named by with
	splitRange          // cools below half of OP, heats above it
	backwash            // runs a quarter of an hour, three times a day
	dutyPump            // one of two pumps on one header
	standbyPump         // the other one; with names the first
)

// spec is one loop of Kestrel Fen when all is well. Process and loads are in %
// of span and s; set point and range in units of PV.
type spec struct {
	name, service, area, unit string
	low, high, sp             float64
	op0                       float64 // OP that holds the set point without load
	element                   string
	kind                      ProcessKind
	k, tau, tau2, theta       float64 // k < 0: PV falls when OP rises (direct action)
	tauC                      float64 // s, wished closed-loop time; 0 = the dead time
	kc, ti, td                float64 // set by hand instead of by tauC
	form                      configs.Form
	pOnly, noWindupGuard      bool
	scan                      float64 // s
	sample                    int     // s between published values
	noise, drift              float64 // % ; % per day
	ar, arTau                 float64 // % , s
	step, stepEvery           float64 // load steps: %, s
	spStep, spEvery           float64 // set point steps of the operators: %, s
	demand                    float64 // % of load per unit of daily demand
	header                    float64 // % of load per % of swing on the raw water header
	slew, s, j                float64 // of the final element: %/s, %, %
	gap, gapShare             float64 // %; share of the error that counts inside it
	knee                      float64 // of the titration curve, %
	duty                      configs.Duty
	mode                      string // normal mode; empty = auto
	role                      special
	with                      string
	gainTags, positionTag     bool
}

// works is Kestrel Fen. The first eight loops are served over OPC UA, the rest
// over MQTT. Where loops are coupled the one that leads stands first.
var works = []spec{
	{name: "AIC-204", service: "chlorine residual, contact tank outlet", area: "Dosing", unit: "mg/L", high: 4, sp: 1.8, op0: 42, element: "pump",
		k: 0.9, tau: 40, theta: 10, scan: 1, noise: 0.12, ar: 0.6, arTau: 240, step: 2, stepEvery: 1800},
	{name: "LIC-310", service: "clear-well level", area: "Reservoir", unit: "m", high: 5, sp: 3.2, op0: 55, element: "inner-loop",
		kind: Integrator, k: 0.01, theta: 10, tauC: 60, scan: 1, noise: 0.06, ar: 1, arTau: 900, demand: -14, role: outer, with: "FIC-311"},
	{name: "FIC-311", service: "clear-well inlet flow", area: "Reservoir", unit: "L/s", high: 400, sp: 220, op0: 52, element: "valve",
		k: 1.3, tau: 6, theta: 1.5, scan: 0.5, noise: 0.2, ar: 0.6, arTau: 60, slew: 15, mode: "cascade", role: inner, with: "LIC-310"},
	{name: "FIC-118", service: "filter 3 outlet flow", area: "Filtration", unit: "m3/h", high: 500, sp: 260, op0: 48, element: "valve",
		k: 1.1, tau: 14, theta: 3, scan: 1, noise: 0.15, ar: 0.4, arTau: 120, step: 5, stepEvery: 700, slew: 10},
	{name: "PIC-107", service: "booster header pressure", area: "Pumping", unit: "kPa", high: 1000, sp: 560, op0: 60, element: "drive",
		k: 1.2, tau: 5, theta: 1, scan: 0.25, noise: 0.2, ar: 0.8, arTau: 45, demand: -6, header: 0.4, gainTags: true},
	{name: "TIC-221", service: "polymer make-up water temperature", area: "Dosing", unit: "degC", high: 60, sp: 26, op0: 45, element: "heater",
		k: 1.4, tau: 24, theta: 3, scan: 1, noise: 0.08, ar: 0.3, arTau: 200, step: 7, stepEvery: 720},
	{name: "AIC-212", service: "coagulation pH", area: "Dosing", unit: "pH", low: 4, high: 9, sp: 6.4, op0: 47, element: "pump",
		k: -0.8, tau: 35, theta: 8, tauC: 16, scan: 1, noise: 0.12, ar: 1, arTau: 300, step: 3, stepEvery: 2400, knee: 6},
	{name: "PIC-401", service: "high lift header pressure, pump A", area: "Pumping", unit: "kPa", high: 1600, sp: 900, op0: 58, element: "drive",
		k: 1.0, tau: 8, theta: 1, scan: 0.5, noise: 0.15, ar: 0.6, arTau: 60, demand: -8, role: dutyPump, duty: configs.Standby},

	{name: "PIC-402", service: "high lift header pressure, pump B", area: "Pumping", unit: "kPa", high: 1600, sp: 900, op0: 58, element: "drive",
		k: 1.0, tau: 8, theta: 1, scan: 0.5, noise: 0.15, role: standbyPump, with: "PIC-401", duty: configs.Standby},
	{name: "FIC-101", service: "raw water intake flow", area: "Intake", unit: "m3/h", high: 1200, sp: 640, op0: 52, element: "drive",
		k: 1.2, tau: 7, theta: 1.5, scan: 0.5, noise: 0.2, ar: 0.5, arTau: 80, header: 1, spStep: 6, spEvery: 7200, slew: 12, gainTags: true},
	{name: "LIC-121", service: "balance tank level", area: "Intake", unit: "m", high: 6, sp: 3, op0: 50, element: "valve",
		kind: Integrator, k: 0.004, theta: 5, kc: 0.8, ti: 2400, scan: 1, sample: 5, noise: 0.1, ar: 3, arTau: 1200, demand: 10, slew: 5, duty: configs.Averaging},
	{name: "FIC-341", service: "export flow to town main", area: "Reservoir", unit: "L/s", high: 300, sp: 180, op0: 62, element: "drive",
		k: 1.0, tau: 10, theta: 2, scan: 1, noise: 0.2, ar: 0.5, arTau: 100, step: 4, stepEvery: 1500, demand: -8},
	{name: "AIC-208", service: "post-chlorination residual, flow paced", area: "Dosing", unit: "mg/L", high: 2, sp: 0.9, op0: 45, element: "pump",
		k: 1.1, tau: 60, theta: 20, scan: 1, noise: 0.12, ar: 0.6, arTau: 400, step: 3, stepEvery: 3600, role: flowPaced, with: "FIC-341"},
	{name: "AIC-231", service: "settled water turbidity, coagulant dose", area: "Dosing", unit: "NTU", high: 10, sp: 2.4, op0: 44, element: "pump",
		kind: SecondOrder, k: -0.6, tau: 240, tau2: 90, theta: 120, form: configs.Series, td: 60, tauC: 160, scan: 5, sample: 5, noise: 0.15, ar: 1, arTau: 2400, step: 3, stepEvery: 10800},
	{name: "AIC-240", service: "residual aluminium analyser, alum trim", area: "Dosing", unit: "ug/L", high: 200, sp: 60, op0: 50, element: "pump",
		k: 0.7, tau: 1500, theta: 600, tauC: 900, scan: 300, sample: 300, noise: 0.3, drift: 0.2, ar: 1.5, arTau: 7200},
	{name: "TIC-225", service: "laboratory sample water temperature", area: "Dosing", unit: "degC", low: 0, high: 40, sp: 20, op0: 54, element: "actuator",
		kind: SecondOrder, k: 0.9, tau: 90, tau2: 15, theta: 6, td: 8, tauC: 15, form: configs.Ideal, scan: 1, sample: 1, noise: 0.06, ar: 1, arTau: 1800, demand: 12, role: splitRange},
	{name: "LIC-320", service: "wash water sump level", area: "Filtration", unit: "m", high: 3, sp: 1.5, op0: 50, element: "valve",
		kind: Integrator, k: -0.006, theta: 4, kc: 1.2, ti: 1800, gap: 8, gapShare: 0.25, scan: 1, sample: 5, noise: 0.15, ar: 6, arTau: 600, slew: 5, duty: configs.GapDuty},
	{name: "PIC-330", service: "air scour header pressure", area: "Filtration", unit: "kPa", high: 100, sp: 50, op0: 50, element: "valve",
		k: 1.0, tau: 6, theta: 1, kc: 2, pOnly: true, scan: 0.5, noise: 0.2, ar: 0.8, arTau: 60, slew: 20},
	{name: "FIC-125", service: "filter backwash flow", area: "Filtration", unit: "m3/h", high: 900, sp: 540, op0: 0, element: "valve",
		k: 1.2, tau: 6, theta: 2, scan: 1, noise: 0.15, ar: 0.4, arTau: 60, slew: 5, role: backwash, duty: configs.Batch},
	{name: "FIC-140", service: "recycled wash water flow", area: "Intake", unit: "m3/h", high: 200, sp: 96, op0: 50, element: "valve",
		k: 1.0, tau: 8, theta: 2, scan: 1, noise: 0.2, ar: 0.5, arTau: 90, header: 0.8, slew: 10},
	{name: "PIC-105", service: "raw water main pressure", area: "Intake", unit: "kPa", high: 800, sp: 420, op0: 50, element: "valve",
		k: 1.1, tau: 6, theta: 1.5, scan: 0.5, noise: 0.2, ar: 0.6, arTau: 60, header: 1.2, slew: 15},
	{name: "FIC-207", service: "lime slurry flow", area: "Dosing", unit: "L/h", high: 600, sp: 300, op0: 50, element: "valve",
		k: 1.2, tau: 9, theta: 3, scan: 1, noise: 0.1, ar: 0.3, arTau: 150, s: 0.2, slew: 10, positionTag: true},
	{name: "PIC-150", service: "instrument air pressure", area: "Pumping", unit: "kPa", high: 1000, sp: 700, op0: 55, element: "drive",
		k: 1.4, tau: 20, theta: 2, scan: 1, noise: 0.1, ar: 0.8, arTau: 200, step: 5, stepEvery: 1800, noWindupGuard: true},
	{name: "LIC-330", service: "service reservoir level", area: "Reservoir", unit: "m", high: 8, sp: 5.6, op0: 52, element: "valve",
		kind: IntegratorLag, k: 0.003, tau: 20, theta: 10, tauC: 120, scan: 5, sample: 5, noise: 0.05, ar: 1.5, arTau: 3600, demand: -10, slew: 2},
	{name: "AIC-215", service: "final water pH, lime dose", area: "Dosing", unit: "pH", low: 5, high: 10, sp: 7.8, op0: 46, element: "pump",
		k: 0.7, tau: 50, theta: 12, tauC: 24, scan: 1, noise: 0.1, ar: 0.8, arTau: 500, step: 2.5, stepEvery: 3600, knee: 8},
}

// defaultOPCUALoops is how many of the loops, from the first, an OPC UA server
// carries unless told otherwise.
const defaultOPCUALoops = 8

// tuning is what the faceplate of the loop shows, rounded as people do.
func (s *spec) tuning() (kc, ti, td float64) {
	kc, ti, td = s.kc, s.ti, s.td
	if kc == 0 {
		tauC := s.tauC
		if tauC == 0 {
			tauC = s.theta
		}
		// Sample and hold delays by half a scan on the average.
		kc, ti = SIMC(s.kind, s.k, s.tau, s.tau2, s.theta+s.scan/2, tauC+s.scan/2)
	}
	if s.pOnly {
		ti = 0
	}
	return roundTo(kc, 3), roundTo(ti, 3), td
}

// roundTo rounds to a number of significant digits.
func roundTo(x float64, digits int) float64 {
	if x == 0 {
		return 0
	}
	m := math.Pow(10, float64(digits-1)-math.Floor(math.Log10(math.Abs(x))))
	return math.Round(x*m) / m
}

func (s *spec) spPct() float64 { return (s.sp - s.low) / (s.high - s.low) * 100 }

func (s *spec) sign() float64 {
	if s.k < 0 {
		return -1
	}
	return 1
}

func (s *spec) integrating() bool { return s.kind == Integrator || s.kind == IntegratorLag }
