package server

import (
	"math"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/testing/protocmp"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

func TestRecordedReadingShowsWhatWasIndicated(t *testing.T) {
	inf := math.Inf(1)
	for _, test := range []struct {
		name    string
		reading engine.Reading
		want    *leadlinev1.RecordedReading
		detail  string
		text    string
	}{
		{"value", engine.Reading{Value: 18.25, Unit: "mm"}, &leadlinev1.RecordedReading{Value: new(18.25)}, "", "18.25 mm"},
		{"above", engine.Reading{Extent: engine.ExtentAbove, Value: 40, Unit: "mm"}, &leadlinev1.RecordedReading{Above: new(40.0)}, "", "above 40 mm"},
		{"below", engine.Reading{Extent: engine.ExtentBelow, Value: -0.5}, &leadlinev1.RecordedReading{Below: new(-0.5)}, "", "below -0.5"},
		{"between", engine.Reading{Extent: engine.ExtentBetween, Value: 18, Upper: 20, Unit: "mm"},
			&leadlinev1.RecordedReading{Between: &leadlinev1.Reading_Between{Lower: new(18.0), Upper: new(20.0)}}, "", "18 to 20 mm"},
		{"mean of several", engine.Reading{Value: 18.25, Samples: 600}, &leadlinev1.RecordedReading{Value: new(18.25), SampleCount: new(uint32(600))}, "", "18.25"},
		{"value that is no number", engine.Reading{Value: math.NaN()}, &leadlinev1.RecordedReading{}, "; its value is NaN", "NaN"},
		{"above infinity", engine.Reading{Extent: engine.ExtentAbove, Value: inf}, &leadlinev1.RecordedReading{}, "; its above is +Inf", "above +Inf"},
		{"half a line", engine.Reading{Extent: engine.ExtentBetween, Value: -inf, Upper: 3},
			&leadlinev1.RecordedReading{Between: &leadlinev1.Reading_Between{Upper: new(3.0)}}, "; its between.lower is -Inf", "-Inf to 3"},
		{"all of it", engine.Reading{Extent: engine.ExtentBetween, Value: -inf, Upper: inf},
			&leadlinev1.RecordedReading{Between: &leadlinev1.Reading_Between{}}, "; its between.lower is -Inf; its between.upper is +Inf", "-Inf to +Inf"},
	} {
		t.Run(test.name, func(t *testing.T) {
			got := new(leadlinev1.RecordedReading)
			setRecordedIndication(got, &test.reading)
			if diff := cmp.Diff(test.want, got, protocmp.Transform()); diff != "" {
				t.Errorf("(-want +got)\n%s", diff)
			}
			stored := engine.StoredReading{Reading: test.reading, Status: engine.Refused, Reason: engine.UnknownQuantity, Detail: "not declared"}
			if detail := detailOf(&stored); detail != "not declared"+test.detail {
				t.Errorf("detail %q", detail)
			}
			stored.Reason = engine.ValueOutOfRange // whose detail names it already
			if detail := detailOf(&stored); detail != "not declared" {
				t.Errorf("detail %q", detail)
			}
			if text := indicationText(&test.reading); text != test.text {
				t.Errorf("text %q, want %q", text, test.text)
			}
		})
	}
}

// TestIndicationIsReadBack: what is listed can be sent again.
func TestIndicationIsReadBack(t *testing.T) {
	for _, want := range []engine.Reading{
		{Value: 18.25}, {Value: 18.25, Samples: 3}, {Extent: engine.ExtentAbove, Value: 40}, {Extent: engine.ExtentBelow},
		{Extent: engine.ExtentBetween, Value: 18, Upper: 20, Samples: 1},
	} {
		m := new(leadlinev1.RecordedReading)
		setRecordedIndication(m, &want)
		got, err := readingOf(&leadlinev1.Reading{Value: m.Value, Above: m.Above, Below: m.Below, Between: m.Between, SampleCount: m.SampleCount})
		if err != nil || got != want {
			t.Errorf("%+v is read as %+v, %v", want, got, err)
		}
	}
}

func TestReadingsShowMeansOfSeveral(t *testing.T) {
	page := readingsText([]engine.StoredReading{
		{Reading: engine.Reading{Quantity: "gap", Value: 18.25, Unit: "mm", Samples: 600}},
		{Reading: engine.Reading{Quantity: "gap", Extent: engine.ExtentBetween, Value: 18, Upper: 20, Unit: "mm"}},
	}, "")
	for _, want := range []string{"18.25 mm, mean of 600", "18 to 20 mm"} {
		if !strings.Contains(page, want) {
			t.Errorf("%q isn't on the page\n%s", want, page)
		}
	}
}
