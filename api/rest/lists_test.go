package rest

import "testing"

func TestAcceptedChoosesWhatTheClientLikesBest(t *testing.T) {
	for accept, want := range map[string]string{
		"":                                     "application/json",
		"*/*":                                  "application/json",
		"text/csv":                             "text/csv",
		"text/csv;q=1, application/json;q=0.5": "text/csv",
		"application/json, text/csv":           "application/json",
		"text/*, application/json;q=0.9":       "text/csv",
		"text/csv;q=0, */*":                    "application/json",
		"image/png":                            "application/json",
		"text/html,application/xhtml+xml,*/*;q=0.8":         "application/json",
		"nonsense;;, text/csv":                              "text/csv",
		"text/csv;q=high, application/json;q=0.1, */*;q=.3": "text/csv",
	} {
		if got := accepted(accept, "application/json", "text/csv"); got != want {
			t.Errorf("Accept %q: %s, want %s", accept, got, want)
		}
	}
}
