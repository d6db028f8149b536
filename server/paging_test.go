package server_test

import (
	"fmt"
	"net/url"
	"slices"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
)

// pages follows a list to its end and returns the named member of each entry.
func (r *running) pages(path, list, member string) (entries []string, pages int) {
	r.t.Helper()
	token := ""
	for {
		query := path
		if token != "" {
			query += "&page_token=" + url.QueryEscape(token)
		}
		a := r.call("GET", query, "").want(200)
		pages++
		for _, entry := range a.json(list).([]any) {
			entries = append(entries, fmt.Sprint(entry.(map[string]any)[member]))
		}
		var ok bool
		if token, ok = a.json("next_page_token").(string); !ok {
			r.t.Fatalf("no next_page_token in %s", a.body)
		}
		if token == "" || pages > 1000 {
			return entries, pages
		}
	}
}

func TestListsAreComplete(t *testing.T) {
	r := startServer(t)
	ids := []string{"A", "B-1", "a", "a-b", "a.b", "a/b", "a0", "a:b", "aa", "a_b", "b"}
	for _, id := range ids {
		r.call("PUT", "/v1/quantities/"+url.PathEscape(id), gapDeclaration).want(200)
		for i := range 3 {
			r.call("POST", "/v1/quantities/"+url.PathEscape(id)+"/readings", fmt.Sprintf(`{"value":0.8%d}`, i)).want(200)
			r.call("POST", "/v1/quantities/"+url.PathEscape(id)+"/readings", `{"value":0.8,"unit":"m"}`).want(200)
		}
		r.clock.Advance(time.Second)
	}
	slices.Sort(ids) // by bytes
	for size := 1; size <= 12; size += 2 {
		for _, list := range []struct{ path, name, member string }{
			{"/v1/quantities", "quantities", "id"}, {"/v1/beliefs", "beliefs", "quantity"},
		} {
			got, pages := r.pages(fmt.Sprintf("%s?page_size=%d", list.path, size), list.name, list.member)
			if !slices.Equal(got, ids) || pages != (len(ids)+size-1)/size {
				t.Errorf("%s by %d: %d pages of %v", list.path, size, pages, got)
			}
			got, _ = r.pages(fmt.Sprintf("%s?page_size=%d&prefix=a", list.path, size), list.name, list.member)
			if want := slices.DeleteFunc(slices.Clone(ids), func(id string) bool { return !strings.HasPrefix(id, "a") }); !slices.Equal(got, want) {
				t.Errorf("%s by %d below a: %v", list.path, size, got)
			}
		}
		all, _ := r.pages(fmt.Sprintf("/v1/quantities/a%%2Fb/readings?page_size=%d", size), "readings", "ledger_position")
		applied, _ := r.pages(fmt.Sprintf("/v1/quantities/a%%2Fb/readings?status=APPLIED&page_size=%d", size), "readings", "ledger_position")
		refused, _ := r.pages(fmt.Sprintf("/v1/readings?status=REFUSED&page_size=%d", size), "readings", "ledger_position")
		if len(all) != 6 || len(applied) != 3 || len(refused) != 3*len(ids) || len(slices.Compact(slices.Clone(all))) != 6 {
			t.Errorf("by %d: %v, applied %v, refused %v", size, all, applied, refused)
		}
	}
}

func TestPageTokenHoldsForItsListOnly(t *testing.T) {
	r := startServer(t)
	for _, id := range []string{"a1", "a2", "a3"} {
		r.call("PUT", "/v1/quantities/"+id, gapDeclaration).want(200)
	}
	token := r.call("GET", "/v1/quantities?page_size=1&prefix=a", "").want(200).json("next_page_token").(string)
	token = url.QueryEscape(token)
	for _, path := range []string{"/v1/quantities?page_token=", "/v1/quantities?prefix=a1&page_token=", "/v1/quantities?prefix=a&show_retired=true&page_token=", "/v1/beliefs?prefix=a&page_token="} {
		r.call("GET", path+token, "").wantProblem(400, engine.InvalidField, "page_token")
	}
	// The size of a page may change on the way, and the service may restart.
	r.stop()
	again := startServerOn(t, r.file, r.clock)
	a := again.call("GET", "/v1/quantities?prefix=a&page_size=5&page_token="+token, "").want(200)
	if got := len(a.json("quantities").([]any)); got != 2 {
		t.Errorf("%d quantities after the first: %s", got, a.body)
	}
}

func TestPagesOfBeliefsShareAnInstant(t *testing.T) {
	r := startServer(t)
	for _, id := range []string{"a1", "a2"} {
		r.call("PUT", "/v1/quantities/"+id, gapDeclaration).want(200)
	}
	first := r.call("GET", "/v1/beliefs?page_size=1", "").want(200)
	r.clock.Advance(time.Hour)
	second := r.call("GET", "/v1/beliefs?page_size=1&page_token="+url.QueryEscape(first.json("next_page_token").(string)), "").want(200)
	timeOf := func(a answer) any { return a.json("beliefs").([]any)[0].(map[string]any)["time"] }
	if timeOf(first) != timeOf(second) {
		t.Errorf("pages of %v and %v", timeOf(first), timeOf(second))
	}
}
