package server

import (
	"strconv"

	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// instrumentDeclarationOf reads a declaration. It checks what only the interface
// knows: what is given as 0, where the engine's 0 is absent. Ranges are the
// engine's.
func instrumentDeclarationOf(m *leadlinev1.Instrument) (engine.InstrumentDeclaration, error) {
	d := engine.InstrumentDeclaration{Unit: m.GetUnit(), Description: m.GetDescription(), Resolution: m.GetResolution()}
	var err error
	if d.Repeatability, err = instrumentRepeatabilityOf(m.GetRepeatability()); err != nil {
		return d, err
	}
	if err := notZero("resolution", m.Resolution); err != nil {
		return d, err
	}
	if i := m.GetMeasuringInterval(); i != nil {
		d.MeasuringInterval = engine.MeasuringInterval{HasLower: i.Lower != nil, HasUpper: i.Upper != nil, Lower: i.GetLower(), Upper: i.GetUpper()}
		if i.Lower == nil && i.Upper == nil {
			return d, refuse(engine.MissingField, "measuring_interval", "measuring_interval is empty; give lower, upper or both, or leave measuring_interval out")
		}
	}
	for i, c := range m.GetCalibrations() {
		calibration, err := calibrationOf("calibrations["+strconv.Itoa(i)+"].", c)
		if err != nil {
			return d, err
		}
		d.Calibrations = append(d.Calibrations, calibration)
	}
	return d, nil
}

func instrumentRepeatabilityOf(r *leadlinev1.Instrument_Repeatability) (engine.InstrumentRepeatability, error) {
	if r == nil {
		return engine.InstrumentRepeatability{}, nil
	}
	d := engine.InstrumentRepeatability{
		StandardDeviation: r.GetStandardDeviation(), Relative: r.GetRelative(), BetweenOccasions: r.GetBetweenOccasions(),
	}
	if r.StandardDeviation == nil && r.Relative == nil && r.GetCorrelated() == nil && r.BetweenOccasions == nil && r.GetLearned() == nil {
		return d, refuse(engine.MissingField, "repeatability", "repeatability is empty; give standard_deviation or another of its parts, or leave repeatability out")
	}
	err := noneZero("repeatability.",
		given{"standard_deviation", r.StandardDeviation}, given{"relative", r.Relative}, given{"between_occasions", r.BetweenOccasions})
	if err == nil && r.GetLearned() != nil {
		d.Learned, err = learnedOf(r.GetLearned())
	}
	if err != nil || r.GetCorrelated() == nil {
		return d, err
	}
	d.Correlated, err = correlatedOf(r.GetCorrelated())
	return d, err
}

func correlatedOf(c *leadlinev1.Instrument_Correlated) (engine.Correlated, error) {
	const message = "repeatability.correlated"
	d := engine.Correlated{StandardDeviation: c.GetStandardDeviation()}
	if err := together(message, given{"standard_deviation", c.StandardDeviation}); err != nil {
		return d, err
	}
	const field = message + ".correlation_time"
	if c.GetCorrelationTime() == nil {
		return d, refuse(engine.MissingField, field, field+" is missing; give the time in which the autocorrelation falls to 1/e, such as \"60s\"")
	}
	var err error
	d.Time, err = positiveOf(field, c.GetCorrelationTime())
	return d, err
}

// calibrationOf reads a calibration; at is its path, with a dot at the end.
func calibrationOf(at string, m *leadlinev1.Calibration) (engine.Calibration, error) {
	c := engine.Calibration{
		Bias: m.GetBias(), BiasStandardUncertainty: m.GetBiasStandardUncertainty(),
		ExpandedUncertainty: m.GetExpandedUncertainty(), CoverageFactor: m.GetCoverageFactor(),
		RelativeBiasStandardUncertainty: m.GetRelativeBiasStandardUncertainty(),
		DriftStandardDeviation:          m.GetDriftStandardDeviation(),
		Reference:                       m.GetReference(), CommonStandardUncertainty: m.GetCommonStandardUncertainty(),
		Certificate: m.GetCertificate(),
	}
	if m.GetValidFrom() == nil {
		return c, refuse(engine.MissingField, at+"valid_from", at+"valid_from is missing; give the time from which the calibration is valid")
	}
	var err error
	if c.ValidFrom, err = instantOf(at+"valid_from", m.GetValidFrom()); err != nil {
		return c, err
	}
	if err := noneZero(at,
		given{"bias_standard_uncertainty", m.BiasStandardUncertainty}, given{"expanded_uncertainty", m.ExpandedUncertainty},
		given{"coverage_factor", m.CoverageFactor}, given{"relative_bias_standard_uncertainty", m.RelativeBiasStandardUncertainty},
		given{"drift_standard_deviation", m.DriftStandardDeviation}, given{"common_standard_uncertainty", m.CommonStandardUncertainty},
	); err != nil {
		return c, err
	}
	if m.GetDriftPer() != nil {
		if c.DriftPer, err = positiveOf(at+"drift_per", m.GetDriftPer()); err != nil {
			return c, err
		}
	}
	if c.HasDue = m.GetDue() != nil; c.HasDue {
		c.Due, err = instantOf(at+"due", m.GetDue())
	}
	return c, err
}

// noneZero refuses the first number that the engine would take for absent.
func noneZero(at string, numbers ...given) error {
	for _, n := range numbers {
		if err := notZero(at+n.name, n.value); err != nil {
			return err
		}
	}
	return nil
}

// instrumentMessage writes an instrument; what wasn't declared is left out.
func instrumentMessage(v *engine.InstrumentView) *leadlinev1.Instrument {
	i := &v.Instrument
	d := &i.Declaration
	m := &leadlinev1.Instrument{
		Id: string(i.ID), Unit: d.Unit, Description: d.Description,
		Repeatability: instrumentRepeatabilityMessage(&d.Repeatability),
		Resolution:    unlessZero(d.Resolution),
		Revision:      i.Revision, Etag: i.ETag(),
		CreateTime: timestamp(i.CreateTime), UpdateTime: timestamp(i.UpdateTime),
		QuantityCount: uint32(v.Quantities), RebuildingCount: uint32(v.Rebuilding),
	}
	if r := toleranceMessage(engine.Tolerance(d.MeasuringInterval)); r != nil {
		m.MeasuringInterval = &leadlinev1.Instrument_MeasuringInterval{Lower: r.Lower, Upper: r.Upper}
	}
	for n := range d.Calibrations {
		m.Calibrations = append(m.Calibrations, calibrationMessage(&d.Calibrations[n]))
	}
	if i.Retired {
		m.RetireTime = timestamp(i.RetireTime)
	}
	return m
}

func instrumentRepeatabilityMessage(r *engine.InstrumentRepeatability) *leadlinev1.Instrument_Repeatability {
	if *r == (engine.InstrumentRepeatability{}) {
		return nil
	}
	m := &leadlinev1.Instrument_Repeatability{
		StandardDeviation: unlessZero(r.StandardDeviation), Relative: unlessZero(r.Relative),
		BetweenOccasions: unlessZero(r.BetweenOccasions), Learned: learnedMessage(r.Learned),
	}
	if c := r.Correlated; c != (engine.Correlated{}) {
		m.Correlated = &leadlinev1.Instrument_Correlated{
			StandardDeviation: new(c.StandardDeviation), CorrelationTime: durationpb.New(c.Time),
		}
	}
	return m
}

func calibrationMessage(c *engine.Calibration) *leadlinev1.Calibration {
	m := &leadlinev1.Calibration{
		ValidFrom: timestamp(c.ValidFrom), Bias: c.Bias,
		BiasStandardUncertainty: unlessZero(c.BiasStandardUncertainty),
		ExpandedUncertainty:     unlessZero(c.ExpandedUncertainty), CoverageFactor: unlessZero(c.CoverageFactor),
		RelativeBiasStandardUncertainty: unlessZero(c.RelativeBiasStandardUncertainty),
		DriftStandardDeviation:          unlessZero(c.DriftStandardDeviation),
		Reference:                       c.Reference, CommonStandardUncertainty: unlessZero(c.CommonStandardUncertainty),
		Certificate: c.Certificate,
	}
	if c.DriftPer != 0 {
		m.DriftPer = durationpb.New(c.DriftPer)
	}
	if c.HasDue {
		m.Due = timestamp(c.Due)
	}
	return m
}

// unlessZero writes a number whose 0 is the engine's word for absent.
func unlessZero(x float64) *float64 {
	if x == 0 {
		return nil
	}
	return &x
}
