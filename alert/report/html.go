package report

import (
	_ "embed" // the template and its style
	"fmt"
	"html/template"
	"io"

	"tailbell/alert/figure"
)

//go:embed report.html.tmpl
var page string

//go:embed report.css
var style string

var pages = template.Must(template.New("report").Funcs(template.FuncMap{
	"style":   func() template.CSS { return template.CSS(figure.Style + style) }, //nolint:gosec // our own style sheets
	"picture": func(svg string) template.HTML { return template.HTML(svg) },      //nolint:gosec // package figure escapes all text
	"caution": func() string { return Caution }, "funnelWords": func() string { return funnelWords },
	"head": headOf, "short": short, "baselines": baselines, "estimate": estimateOf, "funnel": funnelTable, "heading": heading, "commands": commands, "glance": glance,
	"paragraphs": paragraphs, "steps": steps, "series": seriesTable, "leftOut": leftOut, "rehearsalTitle": rehearsalTitle,
	"rehearsal": rehearsal, "lacks": lacks, "again": again, "setupText": func(r *Report) string { return string(r.Setup.Text) },
}).Parse(page))

// HTML writes the report as one HTML file that needs nothing from outside.
func (r *Report) HTML(w io.Writer) error {
	if err := pages.Execute(w, r); err != nil {
		return fmt.Errorf("write the report as HTML: %w", err)
	}
	return nil
}
