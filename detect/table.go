package detect

// Row is one detector: its kind, what it says, where its method is from, what it
// measures (in the order of the JSON) and its step, called once a slot. What it
// holds lives in the state of the watch; what it claims is read by Claim.
type Row struct {
	Kind     Kind
	Doc      string
	Source   string
	Measures []string
	step     func(*Watch)
	claim    func(*Watch) claim
	measure  func(*Watch, []float64)
}

// claim is a statement of one detector, before the verdict. Times are seconds
// since T0.
type claim struct {
	On       bool
	Since    float64
	Cause    uint8
	Also     [2]uint8
	Conf     float32
	Strength float32 // what doubles when it gets worse
}

// openFinding is what the watch has said and not taken back.
type openFinding struct {
	On       bool
	Cause    uint8
	Said     uint16 // causes said in this episode, a bit each
	Conf     float32
	Since    float64
	Strength float32
	Returns  uint8 // causes that were given up and claimed again
	Moves    uint8 // updates for the confidence alone
}

const kinds = 11

// Indices of the table; the order is the order of output at equal time.
const (
	kGrowing = iota
	kSustained
	kSticking
	kOffset
	kSaturation
	kSluggish
	kFrozen
	kRangeEnd
	kMode
	kTuning
	kStale
)

// table lists all loop detectors. It is filled by init only because its
// functions refer to it; nothing changes it later.
var table [kinds]Row

func init() {
	table = [kinds]Row{
		kGrowing: {GrowingOscillation, "cycles of e that grow: regular half-cycles, a rising slope of ln(peak to peak), above the loop's own usual size, three times running",
			"half-cycles: Hägglund 1995, Control Eng. Practice 3(11) 1543; regularity: Thornhill, Huang & Zhang 2003, J. Process Control 13, 91; lag and bracket: methods section 5",
			[]string{"period_s", "growth_per_cycle", "amplitude_pct", "amplitude_pv", "gain", "reset_s", "pi_lag_deg", "time_to_op_limit_s", "time_to_pv_alarm_s"},
			stepNone, claimGrowing, measureCycle},
		kSustained: {SustainedOscillation, "half-cycles that follow each other without rest, regular and large against noise and the loop's own usual",
			"Hägglund 1995; Thornhill, Huang & Zhang 2003", []string{"period_s", "amplitude_pct", "amplitude_pv", "regularity", "gain", "reset_s", "shape_index", "third_harmonic", "pv_jump_share", "pi_lag_deg", "direct_lag_deg"},
			stepNone, claimSustained, measureSustained},
		kSticking: {ValveStickingKind, "a cycle whose OP (PV where integrating) is a triangle, with the loop's own tuning unchanged",
			"He, Wang, Pottmann & Qin 2007, Ind. Eng. Chem. Res. 46, 4549", []string{"period_s", "amplitude_pct", "amplitude_pv", "op_swing_pct", "shape_index", "third_harmonic", "pv_jump_share", "regularity", "pi_lag_deg", "direct_lag_deg"},
			stepNone, claimSticking, measureSticking},
		kOffset: {SustainedOffset, "e keeps its sign outside the band, OP is free, for longer than the loop's recovery",
			"integral action must move OP by (Kc/Ti) Int e: exact for the PI law", []string{"offset_pct", "offset_pv", "duration_s", "gain", "reset_s"},
			stepOffset, claimOffset, measureOffset},
		kSaturation: {OutputSaturation, "OP lies at the limit that e pushes towards; wind-up when it stays there after e has changed sign",
			"leave-time test, methods section 8", []string{"offset_pct", "offset_pv", "op_pct", "duration_s", "overhang_s", "overshoot_pct"},
			stepSaturation, claimSaturation, measureSaturation},
		kSluggish: {SluggishRecovery, "recoveries from rest take several times the loop's usual time, or the residence time of its process",
			"slow pole and proportional share: methods section 7; residence time: Åström & Hägglund 1995", []string{"recovery_s", "usual_s", "proportional_share", "gain", "reset_s"},
			stepRecovery, claimSluggish, measureSluggish},
		kFrozen: {FrozenPV, "PV stands to the last bit for far longer than ever before", "common practice, no source",
			[]string{"still_s", "op_travel_pct"}, stepFrozen, claimFrozen, measureFrozen},
		kRangeEnd: {PVAtRangeEnd, "PV is pegged at the end of its range while SP asks for something else", "common practice, no source",
			[]string{"pv", "duration_s"}, stepRangeEnd, claimRangeEnd, measureRangeEnd},
		kMode: {NotInNormalMode, "the law has not acted as planned for hours", "common practice, no source",
			[]string{"duration_s"}, stepMode, claimMode, measureMode},
		kTuning: {TuningChanged, "gain or reset in service changed: from tags, or from fits before and after",
			"methods section 9", []string{"gain", "gain_before", "reset_s", "reset_before_s", "gain_at_least"}, stepTuneChange, claimTuning, measureTuning},
		kStale: {StaleData, "no usable value for longer than the loop's silence limit", "common practice, no source",
			[]string{"duration_s"}, stepNone, claimStale, measureStale},
	}
}

// Table gives the rows, for documents and tests.
func Table() []Row { return table[:] }

func stepNone(*Watch) {}

var causes = [...]Cause{NoCause, ResetTooShort, GainTooHigh, ResetTooLong, GainTooLow, IntegralMissing, ValveSticking, ValveDeadBand,
	FinalElementNotFollowing, ProcessNonlinear, OutsideDisturbance, OutputLimit, WindUp, MeasurementCause, Undetermined}

func causeIndex(c Cause) uint8 {
	for i, x := range causes {
		if x == c {
			return uint8(i)
		}
	}
	return uint8(len(causes) - 1)
}
