package published_test

import (
	"encoding/json"
	"os"
	"path/filepath"
	"testing"
	"time"
)

// finding is what knowndata.py of testdata/reference found in a set of data, apart from the code.
type finding struct {
	Name        string
	Scored      int
	MeanSquare  float64 `json:"mean_square"`
	Coverage50  float64 `json:"coverage_50"`
	Coverage95  float64 `json:"coverage_95"`
	Threshold   float64
	Steps       []foundStep
	Result      string
	Objections  []string
	Square      float64
	Lag         float64    `json:"lag_1"` // of the last full window, as Square
	Level       float64    // 0 if no window was full
	Probability [3]float64 `json:"probabilities"` // too narrow, too wide, serial
	Explanation *explained
}

// foundStep is a step by the indices of the reading that finds it, and of the last one before it.
type foundStep struct {
	At, Since int
	Direction string
}

// explained is log-likelihoods of three explanations, and what was fitted for them.
type explained struct {
	AsDeclared      float64 `json:"as_declared"`
	Moving          float64
	PerDay          float64 `json:"per_day"`
	Correlated, SD  float64
	CorrelationTime float64 `json:"correlation_time"` // seconds
}

func findings(t *testing.T) map[string]*finding {
	content, err := os.ReadFile(filepath.Join("..", "..", "testdata", "reference", "knowndata.json"))
	if err != nil {
		t.Fatal(err)
	}
	var list []*finding
	if err := json.Unmarshal(content, &list); err != nil {
		t.Fatal(err)
	}
	all := map[string]*finding{}
	for _, f := range list {
		all[f.Name] = f
	}
	return all
}

// daily are times a day apart, in the past of the tests' clock.
func daily(n int) []time.Time { return apart(n, 24*time.Hour) }

func apart(n int, step time.Duration) []time.Time {
	var all []time.Time
	for i := range n {
		all = append(all, time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC).Add(time.Duration(i)*step))
	}
	return all
}

// beaver returns a beaver's body temperatures in °C, nearly all ten minutes apart, and their
// times (Reynolds 1994, R datasets::beaver1 and beaver2).
func beaver(t *testing.T, name string) ([]float64, []time.Time) {
	animal := readTable(t, name+".csv")
	days, clocks := animal.column("day"), animal.column("time")
	var times []time.Time
	for i, day := range days {
		times = append(times, time.Date(1990, 1, int(day), int(clocks[i])/100, int(clocks[i])%100, 0, 0, time.UTC))
	}
	return animal.column("temp"), times
}

// dataset returns values and times of a set of published data.
func dataset(t *testing.T, name string) ([]float64, []time.Time) {
	switch name {
	case "nile":
		flow := readTable(t, "nile.csv").column("flow_1e8_m3")
		return flow, yearly(len(flow))
	case "beaver1", "beaver2":
		return beaver(t, name)
	case "newcomb":
		passage := readTable(t, "newcomb.csv").column("newcomb")
		return passage, daily(len(passage))
	case "michelso, a minute":
		speed := readTable(t, "strd_michelso.csv").column("value")
		return speed, apart(len(speed), time.Minute)
	}
	values := readTable(t, "strd_"+name+".csv").column("value")
	return values, daily(len(values))
}

const (
	unknown  = `"repeatability":{"learned":{}}`
	nileWalk = `"repeatability":{"standard_deviation":122.87798826477799},"dynamics":{"random_walk":{"standard_deviation":38.328840316398821,"per":"31556952s"}}`
	warm     = `"repeatability":{"learned":{"guess":0.05,"worth":4}},"dynamics":{"random_walk":{"per":"3600s","standard_deviation":`
	often    = `"step_detection":{"false_alarm_interval":100}`
	rarely   = `"step_detection":{"false_alarm_interval":10000}`
	widen    = `"on_step":{"widen":300}`
)

// knownData is what the check of a model says of published data, and why. Values without
// times are taken as one a day.
var knownData = []struct {
	name, data, declaration string
	by                      string // the method that holds the belief
	why                     string
}{
	{"lew", "lew", unknown, "SUMS", "a beam swings, but lag 1 of -0.29 in a window has p = 0.016, and 64 days may spend 4e-5"},
	{"lew, window 198", "lew", unknown + `,"model_check":{"window":198}`, "SUMS", "three times as many readings tell the swing: p is 1e-5"},
	{"lottery", "lottery", unknown, "SUMS", "independent draws from 0 to 999: a flat shape shows in the coverage alone, 0.39 and 1 for a uniform law, and is tested by none"},
	{"mavro", "mavro", unknown, "SUMS", "48 scored readings fill no window; but the transmittance drifts up, which the CUSUM finds at reading 43"},
	{"mavro, window 48", "mavro", unknown + `,"model_check":{"window":48}`, "SUMS", "each reading lies near the one before, and beyond what the mean of all foretold"},
	{"michelso", "michelso", unknown, "SUMS", "lag 1 of the readings is 0.535, certified; of the scores in the window 0.59, p = 9e-8; correlated noise over 46 h is likelier than a moving level by e^5"},
	{"michelso, a minute", "michelso, a minute", unknown, "SUMS", "the same scores; but a window an hour makes 8,000 looks a year, of which each may spend 3e-8"},
	{"michelso, known", "michelso", `"repeatability":{"standard_deviation":0.0742},"model_check":{"window":99}`, "SUMS", "with the repeatability within a series, 0.0742: moving and correlated noise are both likelier by e^7, and neither than the other"},
	{"numacc1", "numacc1", unknown, "SUMS", "three readings, of which one has a score"},
	{"numacc2", "numacc2", unknown, "SUMS", "1.1 and 1.3 in turn: perfectly predictable, lag 1 is -0.98"},
	{"numacc3", "numacc3", unknown, "SUMS", "the same on 1e6: no digit is lost"},
	{"numacc4", "numacc4", unknown, "SUMS", "the same on 1e7"},
	{"pidigits", "pidigits", unknown, "SUMS", "digits are independent; a uniform law of ten values has 4 in the central half and all within 95 %"},
	{"newcomb", "newcomb", unknown, "SUMS", "-44 and -2 make the repeatability 10.7, so that the rest lies too near the middle"},

	{"nile, constant, 100", "nile", unknown + "," + often, "SUMS", "the drop after 1898 is found in 1901, and thrice again, as the mean of all years follows slowly"},
	{"nile, constant, 10000", "nile", unknown + "," + rarely, "SUMS", "found in 1906, and again in 1941"},
	{"nile, constant, 1e+06", "nile", unknown, "SUMS", "found in 1914; since says 1898 at each interval"},
	{"nile, widened, 100", "nile", unknown + `,"step_detection":{"false_alarm_interval":100,` + widen + `}`, "BANK", "found in 1901 and never again: the belief follows"},
	{"nile, widened, 10000", "nile", unknown + `,"step_detection":{"false_alarm_interval":10000,` + widen + `}`, "BANK", "found in 1906 and never again"},
	{"nile, widened, 1e+06", "nile", unknown + `,"step_detection":{` + widen + `}`, "BANK", "sixteen years below the old level lie in the window"},
	{"nile, walk, 100", "nile", nileWalk + "," + often, "FILTER", "a level that may move follows; only the most sensitive setting finds the drop"},
	{"nile, walk, 10000", "nile", nileWalk + "," + rarely, "FILTER", "not found: a walk of 38 a year follows a drop of 250 in a few years"},
	{"nile, walk, 1e+06", "nile", nileWalk, "FILTER", "likewise"},
	{"nile, known", "nile", `"repeatability":{"standard_deviation":122.87798826477799},"model_check":{"window":99}`, "SUMS", "the drop widens the scatter and makes neighbours alike; moving and correlated noise are both likelier by e^30, the latter with a time longer than the data"},

	{"beaver1, constant, 10000", "beaver1", unknown + "," + rarely, "SUMS", "the temperature rises in the morning and through the evening"},
	{"beaver1, constant, 1e+06", "beaver1", unknown, "SUMS", "likewise"},
	{"beaver1, walk 0.1, 10000", "beaver1", warm + `0.1}},` + rarely, "BANK", "a walk of 0.1 °C an hour is less than it moves: the first hour and a half already show it"},
	{"beaver1, walk 0.1, 1e+06", "beaver1", warm + `0.1}}`, "BANK", "neighbours err alike, but the belief follows before the sums reach 12.7"},
	{"beaver1, walk 0.2, 10000", "beaver1", warm + `0.2}},` + rarely, "BANK", "0.2 °C an hour is how it moves"},
	{"beaver1, walk 0.2, 1e+06", "beaver1", warm + `0.2}}`, "BANK", "likewise"},
	{"beaver1, known", "beaver1", `"model_check":{"window":113},"repeatability":{"standard_deviation":0.05},"dynamics":{"random_walk":{"standard_deviation":0.1,"per":"3600s"}}`, "FILTER", "0.94 a day, 0.19 an hour, is likelier than the declared 0.1 by e^23"},
	{"beaver2, constant, 10000", "beaver2", unknown + "," + rarely, "SUMS", "activity sets in at 15:50; the temperature rises by 0.8 °C from 14:40 on"},
	{"beaver2, constant, 1e+06", "beaver2", unknown, "SUMS", "found at 15:40, with the rise before the activity"},
	{"beaver2, walk 0.1, 10000", "beaver2", warm + `0.1}},` + rarely, "BANK", "found at 15:50, the first reading with activity, since 14:40; and again in the rise after"},
	{"beaver2, walk 0.1, 1e+06", "beaver2", warm + `0.1}}`, "BANK", "found at 16:20, half an hour after activity set in, since 14:40"},
	{"beaver2, walk 0.2, 10000", "beaver2", warm + `0.2}},` + rarely, "BANK", "the walk is wide enough for the rise"},
	{"beaver2, walk 0.2, 1e+06", "beaver2", warm + `0.2}}`, "BANK", "likewise"},
	{"beaver2, known", "beaver2", `"model_check":{"window":99},"repeatability":{"standard_deviation":0.05},"dynamics":{"random_walk":{"standard_deviation":0.1,"per":"3600s"}}`, "FILTER", "repeatability and walk are both understated"},
}
