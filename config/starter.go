package config

import (
	"bytes"
	_ "embed"
	"fmt"
	"maps"
	"slices"
	"strconv"
	"text/template"
)

//go:embed starter.yaml
var starterText string

// Starter returns the commented saprolite.yaml that `saprolite init` writes:
// every section with an example, made from the register where that helps.
// standsFile is written as given, so it should be relative to where the yaml
// goes. The result loads without problems.
func Starter(r *Register, standsFile string) []byte {
	feeds, groups := map[string]bool{}, map[string]bool{}
	for _, s := range r.Positioned {
		if s.Feed != "" {
			feeds[s.Feed] = true
		}
	}
	for i := range r.Stands {
		for _, g := range r.Stands[i].Groups {
			groups[g] = true
		}
	}
	anySource := "gauge-1"
	if ids := r.SourceIDs(); len(r.Positioned) > 0 {
		anySource = r.Positioned[0].ID
	} else if len(ids) > 0 {
		anySource = ids[0]
	}
	var group string
	if names := slices.Sorted(maps.Keys(groups)); len(names) > 0 {
		group = strconv.Quote(names[0])
	}
	var out bytes.Buffer
	// A text/template of ours on plain data cannot fail; TestStarter.
	_ = template.Must(template.New("saprolite.yaml").Parse(starterText)).Execute(&out, map[string]any{
		"Place":     DefaultPlace,
		"Stands":    strconv.Quote(standsFile),
		"Summary":   fmt.Sprintf("%s, %s with a place", count(len(r.Stands), "stand"), count(len(r.Positioned), "source")),
		"Feeds":     slices.Sorted(maps.Keys(feeds)),
		"AnySource": anySource,
		"Group":     group,
	})
	return out.Bytes()
}

func count(n int, word string) string {
	if n == 1 {
		return "1 " + word
	}
	return fmt.Sprintf("%d %ss", n, word)
}
