package engine

import (
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// everyTraits calls fn with all that a quantity can ask for.
func everyTraits(fn func(t traits)) {
	flags := [...]func(*traits) *bool{
		func(t *traits) *bool { return &t.plain }, func(t *traits) *bool { return &t.floored }, func(t *traits) *bool { return &t.averaged },
		func(t *traits) *bool { return &t.display }, func(t *traits) *bool { return &t.censored }, func(t *traits) *bool { return &t.outliers },
		func(t *traits) *bool { return &t.log }, func(t *traits) *bool { return &t.changes }, func(t *traits) *bool { return &t.further },
	}
	for dynamics := DynamicsConstant; dynamics <= DynamicsMeanReverting; dynamics++ {
		for learned := range 3 {
			for errors := NoErrors; errors <= FurtherErrors; errors++ {
				for bits := range 1 << len(flags) {
					t := traits{dynamics: dynamics, learned: learned, errors: errors}
					for i, flag := range flags {
						*flag(&t) = bits>>i&1 == 1
					}
					if t.plain && (errors > NoErrors || t.display || learned > 1) {
						continue // which takes instruments
					}
					fn(t)
				}
			}
		}
	}
}

// What can be declared together is either in the table or refused with a sentence that names
// a combination near by that is.
func TestEveryCombinationIsSupportedOrRefused(t *testing.T) {
	served, refused := map[Method]int{}, 0
	everyTraits(func(asked traits) {
		field, sentence := asked.objection()
		if m := asked.method(); m != "" {
			served[m]++
			if sentence != "" {
				t.Errorf("%+v is served by %s, and refused: %s", asked, m, sentence)
			}
			return
		}
		refused++
		if field == "" || !strings.Contains(sentence, "; the nearest supported combination has ") {
			t.Errorf("%+v is refused without saying what is supported: %q of %q", asked, sentence, field)
		}
	})
	for _, s := range SupportTable {
		if served[s.Method] == 0 {
			t.Errorf("%s serves nothing", s.Method)
		}
	}
	t.Logf("served %v, refused %d", served, refused)
	if refused == 0 {
		t.Error("nothing is refused")
	}
}

// A relaxation that is proposed makes the combination supported.
func TestProposedRelaxationsHelp(t *testing.T) {
	everyTraits(func(asked traits) {
		if asked.method() != "" {
			return
		}
		_, sentence := asked.objection()
		_, nearest, _ := strings.Cut(sentence, "nearest supported combination has ")
		if nearest == "dynamics.constant with values alone" {
			t.Errorf("%+v: nothing near by is supported", asked)
			return
		}
		near := asked
		for _, r := range relaxations {
			if strings.Contains(nearest, r.remedy) {
				r.change(&near)
			}
		}
		if near.method() == "" {
			t.Errorf("%+v: %q is proposed, and refused too", asked, nearest)
		}
	})
}

// README's table is that of the code.
func TestReadmeListsWhatIsSupported(t *testing.T) {
	b, err := os.ReadFile(filepath.Join("..", "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	for i := range SupportTable {
		if row := SupportTable[i].readme(); !strings.Contains(string(b), row+"\n") {
			t.Errorf("README.md lacks the row\n%s", row)
		}
	}
}

// readme is the row of README's table.
func (s *Supported) readme() string {
	yes := func(b bool) string {
		if b {
			return "yes"
		}
		return "no"
	}
	dynamics := "any"
	if len(s.Dynamics) < len(anyDynamics) {
		var all []string
		for _, d := range s.Dynamics {
			all = append(all, dynamicsWord(d))
		}
		dynamics = strings.Join(all, ", ")
	}
	return "| " + strings.Join([]string{
		string(s.Method), dynamics, map[int]string{0: "no", 1: strconv.Itoa(s.Learned)}[s.Learned],
		[...]string{"none", "one bias", "any"}[s.Errors], yes(s.Displays), yes(s.Outliers), yes(s.Changes), s.Bound,
	}, " | ") + " |"
}

// Readings that lie too far apart for their noise, and displays too coarse for it, are refused
// in words that name the remedy; what can be held is not.
func TestWhatPointsCannotHoldIsRefused(t *testing.T) {
	known := Declaration{Repeatability: Repeatability{Form: RepeatabilityKnown, StandardDeviation: 0.5}}
	shown := func(resolution float64) []instrumentUse {
		return []instrumentUse{{declaration: &InstrumentDeclaration{Resolution: resolution}}}
	}
	for _, test := range []struct {
		name        string
		d           Declaration
		least, most float64
		instruments []instrumentUse
		want        string // in the sentence; empty: none
	}{
		{"near", known, 5, 1e6, nil, ""},
		{"far apart", known, 5, 1e10, nil, "check the value"},
		{"coarse", known, 5, 6, shown(100), ""},
		{"far too coarse", known, 5, 6, shown(1000), "declare a repeatability, guess or floor of at least 3.33"},
		{"a floor far below the display", Declaration{Repeatability: Repeatability{Form: RepeatabilityLearnedReference, Floor: 1e-9}}, 5, 6, shown(1), "floor of at least 0.003"},
	} {
		t.Run(test.name, func(t *testing.T) {
			r := readAs{instruments: test.instruments, bareDirect: len(test.instruments) == 0}
			got := r.resolved(&test.d, &tally{least: test.least, most: test.most})
			if (got == "") != (test.want == "") || !strings.Contains(got, test.want) {
				t.Errorf("got %q, want %q in it", got, test.want)
			}
		})
	}
}
