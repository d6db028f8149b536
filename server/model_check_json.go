package server

import leadlinev1 "leadline.example/proto/leadline/v1"

// model writes what a belief says of its scale and method, and how it agrees with the
// readings.
func (o *jsonObject) model(m *leadlinev1.Belief) {
	o.optional("geometric_mean", m.GeometricMean)
	o.optional("geometric_standard_deviation", m.GeometricStandardDeviation)
	if m.Scale != nil {
		o.text("scale", m.GetScale().String())
	}
	o.text("method", m.GetMethod())
	if x := m.GetLastReading(); x != nil {
		o.object("last_reading", func(o *jsonObject) {
			o.time("time", x.GetTime())
			o.optional("tail_probability", x.TailProbability)
			o.boolean("outlying", x.GetOutlying())
			o.optional("outlier_probability", x.OutlierProbability)
		})
	}
	if x := m.GetModelCheck(); x != nil {
		o.object("model_check", func(o *jsonObject) { o.modelCheck(x) })
	}
}

func (o *jsonObject) modelCheck(m *leadlinev1.ModelCheck) {
	o.text("result", m.GetResult().String())
	o.results("objections", m.GetObjections())
	o.integer("scored_count", m.GetScoredCount())
	o.optional("coverage_50", m.Coverage_50)
	o.optional("coverage_95", m.Coverage_95)
	o.optional("mean_squared_normal_score", m.MeanSquaredNormalScore)
	o.integer("outlying_count", m.GetOutlyingCount())
	o.integer("step_count", m.GetStepCount())
	if x := m.GetLastStep(); x != nil {
		o.object("last_step", func(o *jsonObject) {
			o.time("time", x.GetTime())
			o.time("since", x.GetSince())
			o.text("direction", x.GetDirection().String())
		})
	}
	list(o, "tests", m.GetTests(), func(o *jsonObject, x *leadlinev1.ModelCheck_Test) {
		o.text("objection", x.GetObjection().String())
		o.text("name", x.GetName())
		o.number("statistic", x.GetStatistic())
		o.number("probability", x.GetProbability())
		o.number("level", x.GetLevel())
	})
	o.modelCheckAlone(m)
}

func (o *jsonObject) results(name string, results []leadlinev1.ModelCheck_Result) {
	words := make([]string, len(results))
	for i, r := range results {
		words[i] = r.String()
	}
	o.texts(name, words)
}

// modelCheckAlone writes what a belief leaves out of its model check.
func (o *jsonObject) modelCheckAlone(m *leadlinev1.ModelCheck) {
	if m.Quantity != nil {
		o.text("quantity", m.GetQuantity())
	}
	o.optionalInteger("window", m.Window)
	o.optional("lag_1", m.Lag_1)
	if x := m.GetCusum(); x != nil {
		o.object("cusum", func(o *jsonObject) {
			o.number("up", x.GetUp())
			o.number("down", x.GetDown())
			o.number("limit", x.GetLimit())
		})
	}
	if x := m.GetExplanation(); x != nil {
		o.object("explanation", func(o *jsonObject) { o.explanation(x) })
	}
}

func (o *jsonObject) explanation(m *leadlinev1.ModelCheck_Explanation) {
	if x := m.GetAsDeclared(); x != nil {
		o.object("as_declared", func(o *jsonObject) { o.number("log_likelihood", x.GetLogLikelihood()) })
	}
	if x := m.GetMoving(); x != nil {
		o.object("moving", func(o *jsonObject) {
			o.number("log_likelihood", x.GetLogLikelihood())
			o.number("standard_deviation", x.GetStandardDeviation())
			o.duration("per", x.GetPer())
		})
	}
	if x := m.GetCorrelatedNoise(); x != nil {
		o.object("correlated_noise", func(o *jsonObject) {
			o.number("log_likelihood", x.GetLogLikelihood())
			o.number("standard_deviation", x.GetStandardDeviation())
			o.duration("correlation_time", x.GetCorrelationTime())
		})
	}
}
