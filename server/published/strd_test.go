package published_test

import (
	"math"
	"math/big"
	"strconv"
	"testing"
	"time"

	"google.golang.org/protobuf/types/known/timestamppb"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// digits is the log relative error of StRD: how many decimal digits of got are
// those of want, at most the 15 that are certified.
func digits(got, want float64) float64 {
	if got == want {
		return 15
	}
	return min(15, -math.Log10(math.Abs(got-want)/math.Abs(want)))
}

// exactMoments are mean and standard deviation (by n - 1) of binary values, the
// sums without rounding.
func exactMoments(values []float64) (mean, deviation float64) {
	n := new(big.Rat).SetInt64(int64(len(values)))
	sum := new(big.Rat)
	for _, v := range values {
		sum.Add(sum, new(big.Rat).SetFloat64(v))
	}
	m := sum.Quo(sum, n)
	squares := new(big.Rat)
	for _, v := range values {
		d := new(big.Rat).Sub(new(big.Rat).SetFloat64(v), m)
		squares.Add(squares, d.Mul(d, d))
	}
	variance := squares.Quo(squares, new(big.Rat).SetInt64(int64(len(values)-1)))
	root := new(big.Float).SetPrec(200).SetRat(variance)
	deviation, _ = root.Sqrt(root).Float64()
	mean, _ = m.Float64()
	return mean, deviation
}

// strdSets are the nine univariate sets of the NIST Statistical Reference
// Datasets. meanDigits and deviationDigits are what is asked for of the 15
// certified: less only where a double can't hold the data, as 10000000.2 is
// off by 1e-9 and that is 1e-8 of the standard deviation. Naive sums of squares
// give 0.107 for NumAcc3 and no standard deviation at all for NumAcc4.
var strdSets = []struct {
	name            string
	count           int
	mean, deviation string // certified
	meanDigits      float64
	deviationDigits float64
	source          string
}{
	{"lew", 200, "-177.435000000000", "277.332168044316", 14.8, 14.8, "StRD Lew"},
	{"lottery", 218, "518.958715596330", "291.699727470969", 14.8, 14.8, "StRD Lottery"},
	{"mavro", 50, "2.00185600000000", "0.000429123454003053", 14.8, 12.5, "StRD Mavro"},
	{"michelso", 100, "299.852400000000", "0.0790105478190518", 14.8, 13.5, "StRD Michelso"},
	{"numacc1", 3, "10000002", "1", 15, 15, "StRD NumAcc1"},
	{"numacc2", 1001, "1.2", "0.1", 14.8, 14.5, "StRD NumAcc2"},
	{"numacc3", 1001, "1000000.2", "0.1", 14.8, 9.4, "StRD NumAcc3"},
	{"numacc4", 1001, "10000000.2", "0.1", 14.8, 8.2, "StRD NumAcc4"},
	{"pidigits", 5000, "4.53480000000000", "2.86733906028871", 14.8, 14.8, "StRD PiDigits"},
}

func TestCertifiedMeansAndStandardDeviations(t *testing.T) {
	s := start(t)
	for _, tt := range strdSets {
		t.Run(tt.name, func(t *testing.T) {
			values := readTable(t, "strd_"+tt.name+".csv").column("value")
			if len(values) != tt.count {
				t.Fatalf("%d values, want %d", len(values), tt.count)
			}
			s.declare(tt.name, `{"unit":"","repeatability":{"learned":{}}}`)
			s.postAll(readingsOf(tt.name, values))
			b := s.belief(tt.name, time.Time{})
			mean, deviation := b.GetMean(), b.GetRepeatability().GetEstimate()

			if got := digits(mean, parse(t, tt.mean)); got < tt.meanDigits {
				t.Errorf("mean %v has %.1f digits of %s, want %.1f (%s)", mean, got, tt.mean, tt.meanDigits, tt.source)
			}
			if got := digits(deviation, parse(t, tt.deviation)); got < tt.deviationDigits {
				t.Errorf("standard deviation %v has %.1f digits of %s, want %.1f (%s)", deviation, got, tt.deviation, tt.deviationDigits, tt.source)
			}
			// Of the numbers as they arrived, all digits.
			exactMean, exactDeviation := exactMoments(values)
			if got := digits(mean, exactMean); got < 15 {
				t.Errorf("mean %v has %.1f digits of %v, that of the binary values", mean, got, exactMean)
			}
			if got := digits(deviation, exactDeviation); got < 15 {
				t.Errorf("standard deviation %v has %.1f digits of %v, that of the binary values", deviation, got, exactDeviation)
			}
			s.sameReadings(tt.name, values)
		})
	}
}

// sameReadings insists that the readings of a quantity come back, over HTTP and
// gRPC, with the bits they were sent with.
func (s *service) sameReadings(id string, values []float64) {
	s.t.Helper()
	want := map[float64]int{}
	for _, v := range values {
		want[v] += 2
	}
	token := ""
	for more := true; more; more = token != "" {
		overHTTP := new(leadlinev1.ListReadingsResponse)
		s.call("GET", quantityPath(id)+"/readings?page_size=1000&page_token="+token, "").into(overHTTP)
		overGRPC, err := s.readings.ListReadings(s.t.Context(), &leadlinev1.ListReadingsRequest{Quantity: id, PageSize: 1000, PageToken: token})
		if err != nil {
			s.t.Fatal(err)
		}
		for _, r := range append(overHTTP.GetReadings(), overGRPC.GetReadings()...) {
			want[r.GetValue()]--
		}
		token = overGRPC.GetNextPageToken()
	}
	for v, n := range want {
		if n != 0 {
			s.t.Errorf("%s: %v was sent and listed, but %d times more or less", id, v, n)
		}
	}
}

func parse(t testing.TB, text string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// Numbers that decimal notation is bad at arrive, are kept and come back as
// they were sent, over either protocol.
func TestNumbersKeepTheirBits(t *testing.T) {
	values := []float64{
		0.1, 0.1 + 0.2, 1.0 / 3, math.Nextafter(1, 2), math.Nextafter(1, 0), math.Pi * 1e17, 1e23, 5e-100, -1e100,
		9007199254740993, 123456789.123456789, 2.2250738585072014e-100, -0.000429123454003053, 1e21, 1e-7,
	}
	rng := newRand(1)
	for range 200 {
		values = append(values, (rng.Float64()-0.5)*math.Pow(10, float64(rng.IntN(180)-90)))
	}
	s := start(t)
	s.declare("x", `{"unit":"","repeatability":{"standard_deviation":1}}`)
	s.postAll(readingsOf("x", values))
	s.sameReadings("x", values)
	for i, v := range values {
		id := "bits/" + strconv.Itoa(i)
		prior := &leadlinev1.Prior{Mean: &v, StandardDeviation: new(max(math.Abs(v)/3, 1e-99)), Time: timestamppb.New(noon)}
		if _, err := s.quantities.DeclareQuantity(t.Context(), &leadlinev1.DeclareQuantityRequest{Id: id, Quantity: &leadlinev1.Quantity{Prior: prior}}); err != nil {
			t.Fatal(err)
		}
		if got := s.belief(id, noon).GetMean(); math.Float64bits(got) != math.Float64bits(v) {
			t.Errorf("prior mean %v came back as %v", v, got)
		}
	}
}
