package engine

import (
	"cmp"
	"math"
	"slices"
	"sort"
	"strconv"
	"time"
)

// InstrumentNumber is the ledger's short name of an instrument: 1, 2, 3 ... in
// the order of first declaration, never used again; 0 is no instrument.
type InstrumentNumber uint32

// Correlated is the part of an instrument's noise that its neighbouring readings
// share: an Ornstein-Uhlenbeck process of that standard deviation, with
// autocorrelation exp(-h / Time). The zero value is none.
type Correlated struct {
	StandardDeviation float64
	Time              time.Duration
}

// InstrumentRepeatability is the random part of one reading of an instrument.
// Fields that are 0 are absent.
type InstrumentRepeatability struct {
	StandardDeviation float64 // white, in the instrument's unit
	Relative          float64 // white, relative to the level as predicted
	Correlated        Correlated
	BetweenOccasions  float64 // standard deviation, shared by the readings of one occasion (ISO 5725-3)
	// Learned says what is known of the white part where it is learned, for each quantity by
	// itself, in place of StandardDeviation and Relative; its Form is RepeatabilityAbsent where it isn't.
	Learned Repeatability
}

// MeasuringInterval is the range of values that an instrument can indicate (VIM 4.7).
type MeasuringInterval struct {
	HasLower, HasUpper bool
	Lower, Upper       float64
}

// Calibration is what a calibration found out about an instrument, from
// ValidFrom until the next one. All of it is in the instrument's unit but for
// what is relative. Fields that are 0 or empty are absent.
type Calibration struct {
	ValidFrom                       Instant
	Bias                            float64 // systematic error; the correction is its negative
	BiasStandardUncertainty         float64 // the bias's, of all causes
	ExpandedUncertainty             float64 // in place of BiasStandardUncertainty, with CoverageFactor
	CoverageFactor                  float64
	RelativeBiasStandardUncertainty float64 // of a gain, whose error is proportional to the level
	DriftStandardDeviation          float64 // what the bias moves in DriftPer
	DriftPer                        time.Duration
	Reference                       string  // the standard that the calibration rests on
	CommonStandardUncertainty       float64 // the part of the bias's uncertainty that all who rest on Reference share
	Certificate                     string
	HasDue                          bool
	Due                             Instant // when the next calibration is due
}

// StandardUncertainty returns the standard uncertainty of the bias at ValidFrom.
func (c *Calibration) StandardUncertainty() float64 {
	if c.ExpandedUncertainty > 0 {
		return c.ExpandedUncertainty / c.CoverageFactor
	}
	return c.BiasStandardUncertainty
}

// ownVariance is the part of the bias's variance at ValidFrom that no other
// calibration shares.
func (c *Calibration) ownVariance() float64 {
	u, common := c.StandardUncertainty(), c.CommonStandardUncertainty
	return max(0, (u-common)*(u+common))
}

// drift is the variance that the bias gains per second.
func (c *Calibration) drift() float64 {
	if c.DriftPer == 0 {
		return 0
	}
	return c.DriftStandardDeviation * c.DriftStandardDeviation / c.DriftPer.Seconds()
}

// InstrumentDeclaration is all that a user states of an instrument. It is never
// changed once recorded.
type InstrumentDeclaration struct {
	Unit              string
	Description       string
	Repeatability     InstrumentRepeatability
	Resolution        float64 // of the display; 0: not stated
	MeasuringInterval MeasuringInterval
	Calibrations      []Calibration // by ValidFrom
}

// Equal tells whether d and e state the same.
func (d *InstrumentDeclaration) Equal(e *InstrumentDeclaration) bool {
	return d.sameNoise(e) && d.Unit == e.Unit && d.Description == e.Description &&
		slices.Equal(d.Calibrations, e.Calibrations)
}

func (d *InstrumentDeclaration) sameNoise(e *InstrumentDeclaration) bool {
	return d.Repeatability == e.Repeatability && d.Resolution == e.Resolution && d.MeasuringInterval == e.MeasuringInterval
}

// SameBelief tells whether d and e give every set of readings the same belief.
func (d *InstrumentDeclaration) SameBelief(e *InstrumentDeclaration) bool {
	return d.sameNoise(e) && slices.EqualFunc(d.Calibrations, e.Calibrations, func(a, b Calibration) bool {
		a.Certificate, b.Certificate = "", ""
		return a == b
	})
}

// at returns the index of the calibration that a reading at an instant rests on,
// the first one for earlier readings; -1 if there is none at all.
func (d *InstrumentDeclaration) at(i Instant) int {
	n := sort.Search(len(d.Calibrations), func(n int) bool { return d.Calibrations[n].ValidFrom > i })
	return max(n-1, min(0, len(d.Calibrations)-1))
}

// CalibrationState tells how a reading stands to the calibration it rests on.
type CalibrationState uint8

const (
	CalibrationInForce CalibrationState = iota
	CalibrationOverdue                  // the reading was made after the calibration's Due
	CalibrationNotYet                   // before the first calibration's ValidFrom
	CalibrationNone                     // the instrument has no calibration: its bias is taken to be 0
)

// CalibrationStates lists every CalibrationState.
var CalibrationStates = [...]CalibrationState{CalibrationInForce, CalibrationOverdue, CalibrationNotYet, CalibrationNone}

// String returns the word of the interface.
func (s CalibrationState) String() string {
	return [...]string{"IN_FORCE", "OVERDUE", "NOT_YET_VALID", "UNCALIBRATED"}[s]
}

// State returns how a reading at an instant stands to its calibration.
func (d *InstrumentDeclaration) State(i Instant) CalibrationState {
	n := d.at(i)
	if n < 0 {
		return CalibrationNone
	}
	switch c := &d.Calibrations[n]; {
	case i < c.ValidFrom:
		return CalibrationNotYet
	case c.HasDue && i > c.Due:
		return CalibrationOverdue
	}
	return CalibrationInForce
}

// linearised tells whether a reading at an instant enters by a linearisation.
func (d *InstrumentDeclaration) linearised(i Instant) bool {
	n := d.at(i)
	return d.Repeatability.Relative > 0 || n >= 0 && d.Calibrations[n].RelativeBiasStandardUncertainty > 0
}

// Instrument is a declaration with what the service adds to it.
type Instrument struct {
	ID          InstrumentID
	Number      InstrumentNumber
	Declaration InstrumentDeclaration
	Revision    uint32 // from 1, one more at each change of the declaration and at each revival
	CreateTime  Instant
	UpdateTime  Instant
	Retired     bool
	RetireTime  Instant
}

// ETag changes whenever anything of the instrument does.
func (i *Instrument) ETag() string {
	tag := strconv.FormatUint(uint64(i.Revision), 10)
	if i.Retired {
		tag += "-retired"
	}
	return tag
}

// Check returns an *Error for the first thing wrong with d, else nil.
func (d *InstrumentDeclaration) Check() error {
	for _, check := range [...]func() *Error{d.checkText, d.checkRepeatability, d.checkDisplay, d.checkCalibrations} {
		if err := check(); err != nil {
			return err
		}
	}
	return nil
}

func (d *InstrumentDeclaration) checkText() *Error {
	text := Declaration{Unit: d.Unit, Description: d.Description}
	return text.checkText()
}

func (d *InstrumentDeclaration) checkRepeatability() *Error {
	r := &d.Repeatability
	const at = "repeatability."
	if err := checkOptional(at+"standard_deviation", r.StandardDeviation); err != nil {
		return err
	}
	if err := checkRelative(at+"relative", r.Relative); err != nil {
		return err
	}
	if r.Learned.Learned() && (r.StandardDeviation > 0 || r.Relative > 0) {
		return refuse(InvalidField, at+"learned", "repeatability.learned is given beside a standard_deviation or a relative part, in whose place it stands; give one of them")
	}
	if err := r.Learned.checkLearned(at + "learned"); err != nil {
		return err
	}
	if _, sentence := improper(&Declaration{}, d); sentence != "" {
		return refuse(NotSupported, at+"learned", "%s", sentence)
	}
	if r.Relative > 0 && r.StandardDeviation == 0 {
		return refuse(MissingField, at+"standard_deviation", "repeatability.standard_deviation is missing beside repeatability.relative, which says nothing of readings around zero; give the standard deviation there")
	}
	if err := checkOptional(at+"between_occasions", r.BetweenOccasions); err != nil {
		return err
	}
	if r.Correlated == (Correlated{}) {
		return nil
	}
	if err := checkDeviation(at+"correlated.standard_deviation", r.Correlated.StandardDeviation); err != nil {
		return err
	}
	if r.Correlated.Time <= 0 {
		return refuse(InvalidField, at+"correlated.correlation_time", "repeatability.correlated.correlation_time is %v; give a duration above 0, such as \"60s\"", r.Correlated.Time)
	}
	return nil
}

func (d *InstrumentDeclaration) checkDisplay() *Error {
	if err := checkOptional("resolution", d.Resolution); err != nil {
		return err
	}
	return Tolerance(d.MeasuringInterval).check("measuring_interval")
}

// MaxCalibrations bounds the calibrations of one instrument.
const MaxCalibrations = 1_000

func (d *InstrumentDeclaration) checkCalibrations() *Error {
	if n := len(d.Calibrations); n > MaxCalibrations {
		return refuse(InvalidField, "calibrations", "calibrations has %d entries; give at most %d", n, MaxCalibrations)
	}
	for i := range d.Calibrations {
		c := &d.Calibrations[i]
		if err := c.check(calibrationField(i)); err != nil {
			return err
		}
		if i == 0 {
			continue
		}
		if before := d.Calibrations[i-1].ValidFrom; c.ValidFrom <= before {
			return refuse(InvalidField, calibrationField(i)+"valid_from", "%svalid_from %v is not after that of the calibration before, %v; give calibrations in the order of distinct valid_from", calibrationField(i), c.ValidFrom, before)
		}
	}
	return nil
}

func calibrationField(i int) string { return "calibrations[" + strconv.Itoa(i) + "]." }

func (c *Calibration) check(at string) *Error {
	if !c.ValidFrom.Valid() {
		return refuse(InvalidField, at+"valid_from", "%svalid_from lies outside 1678 to 2262; give a time within", at)
	}
	if c.HasDue && (!c.Due.Valid() || c.Due <= c.ValidFrom) {
		return refuse(InvalidField, at+"due", "%sdue %v is not after valid_from %v; give a later time, at most of the year 2262", at, c.Due, c.ValidFrom)
	}
	for _, text := range [...]struct{ field, value string }{{"reference", c.Reference}, {"certificate", c.Certificate}} {
		if len(text.value) > MaxIDBytes || !printable(text.value) {
			return refuse(InvalidField, at+text.field, "%s%s has %d bytes or a character that isn't printable; give at most %d printable bytes", at, text.field, len(text.value), MaxIDBytes)
		}
	}
	return cmp.Or(c.checkUncertainty(at), c.checkCommon(at), c.checkDrift(at))
}

func (c *Calibration) checkUncertainty(at string) *Error {
	if err := checkNumber(at+"bias", c.Bias); err != nil {
		return err
	}
	if err := checkOptional(at+"bias_standard_uncertainty", c.BiasStandardUncertainty); err != nil {
		return err
	}
	if err := checkOptional(at+"expanded_uncertainty", c.ExpandedUncertainty); err != nil {
		return err
	}
	if err := checkOptional(at+"coverage_factor", c.CoverageFactor); err != nil {
		return err
	}
	if c.ExpandedUncertainty > 0 && c.BiasStandardUncertainty > 0 {
		return refuse(InvalidField, at+"expanded_uncertainty", "%sexpanded_uncertainty and bias_standard_uncertainty are both given; give one of them", at)
	}
	switch {
	case c.ExpandedUncertainty > 0 && c.CoverageFactor == 0:
		return refuse(MissingField, at+"coverage_factor", "%[1]scoverage_factor is missing beside %[1]sexpanded_uncertainty; give the k of the certificate, or bias_standard_uncertainty in place of both", at)
	case c.CoverageFactor > 0 && c.ExpandedUncertainty == 0:
		return refuse(MissingField, at+"expanded_uncertainty", "%[1]sexpanded_uncertainty is missing beside %[1]scoverage_factor; give the U of the certificate, or bias_standard_uncertainty in place of both", at)
	case c.CoverageFactor > 0 && c.CoverageFactor < 1:
		return refuse(InvalidField, at+"coverage_factor", "%scoverage_factor is %v; give the k of the certificate, at least 1 and mostly 2", at, c.CoverageFactor)
	}
	if c.ExpandedUncertainty == 0 && c.BiasStandardUncertainty == 0 {
		return refuse(MissingField, at+"bias_standard_uncertainty", "%sbias_standard_uncertainty is missing or 0; give the standard uncertainty of the bias, or expanded_uncertainty with its coverage_factor", at)
	}
	if u := c.StandardUncertainty(); !(u >= MinMagnitude && u <= MaxMagnitude) {
		return refuse(InvalidField, at+"coverage_factor", "%sexpanded_uncertainty divided by coverage_factor is %v; give numbers that lead to 1e-100 to 1e100", at, u)
	}
	return checkRelative(at+"relative_bias_standard_uncertainty", c.RelativeBiasStandardUncertainty)
}

func (c *Calibration) checkCommon(at string) *Error {
	if err := checkOptional(at+"common_standard_uncertainty", c.CommonStandardUncertainty); err != nil {
		return err
	}
	if c.Reference != "" && c.CommonStandardUncertainty == 0 {
		return refuse(MissingField, at+"common_standard_uncertainty", "%[1]sreference is given without %[1]scommon_standard_uncertainty; give the part of the bias's uncertainty that all who rest on %[2]q share", at, c.Reference)
	}
	if c.Reference == "" && c.CommonStandardUncertainty > 0 {
		return refuse(MissingField, at+"reference", "%[1]scommon_standard_uncertainty is given without %[1]sreference; name the standard that it comes from", at)
	}
	if u := c.StandardUncertainty(); c.CommonStandardUncertainty > u*(1+1e-12) {
		return refuse(InvalidField, at+"common_standard_uncertainty", "%scommon_standard_uncertainty is %v, more than the %v of the whole bias; it is a part of that", at, c.CommonStandardUncertainty, u)
	}
	return nil
}

func (c *Calibration) checkDrift(at string) *Error {
	if err := checkOptional(at+"drift_standard_deviation", c.DriftStandardDeviation); err != nil {
		return err
	}
	switch {
	case c.DriftPer < 0:
		return checkDuration(at+"drift_per", c.DriftPer)
	case c.DriftStandardDeviation > 0 && c.DriftPer == 0:
		return refuse(MissingField, at+"drift_per", "%[1]sdrift_per is missing beside %[1]sdrift_standard_deviation; give the time in which the bias moves so far, such as \"31536000s\"", at)
	case c.DriftStandardDeviation == 0 && c.DriftPer > 0:
		return refuse(MissingField, at+"drift_standard_deviation", "%[1]sdrift_standard_deviation is missing beside %[1]sdrift_per; give how far the bias typically moves in that time", at)
	}
	return nil
}

// checkOptional accepts 0, which stands for absent, and any standard deviation.
func checkOptional(field string, s float64) *Error {
	if s == 0 {
		return nil
	}
	return checkDeviation(field, s)
}

// maxRelative bounds relative uncertainties: beyond it the linearisation about
// the predicted level no longer holds.
const maxRelative = 0.2

func checkRelative(field string, s float64) *Error {
	if s == 0 || s >= 1e-12 && s <= maxRelative {
		return nil
	}
	return refuse(InvalidField, field, "%s is %v; give a number from 1e-12 to %v, such as 0.01 for one percent", field, s, maxRelative)
}

// lasting is how far apart two instants are, in seconds, at least 0.
func lasting(from, to Instant) float64 { return math.Max(0, to.Sub(from)/float64(time.Second)) }
