package page

import (
	"net/http"

	"tailbell/alert/words"
)

// exportRows is how many alerts are read at a time.
const exportRows = 100

// export writes the whole record of all alerts, with every step and act, the
// oldest first.
func (p *Page) export(form, contentType string) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		w.Header().Set("Content-Type", contentType)
		w.Header().Set("Content-Disposition", `attachment; filename="`+p.o.Name+"-alerts."+form+`"`)
		w.Header().Set("Cache-Control", "no-store")
		out, err := words.NewExporter(form, w)
		if err == nil {
			err = p.exportAll(r, out)
		}
		if err == nil {
			err = out.End()
		}
		if err != nil && r.Context().Err() == nil {
			p.o.Failed(err)
			panic(http.ErrAbortHandler) // so that nobody takes a part for the whole
		}
	}
}

func (p *Page) exportAll(r *http.Request, out words.Exporter) error {
	for i := range p.o.Parts {
		for after := uint64(0); ; {
			rows, err := p.o.Parts[i].Alerts(r.Context(), AlertsWanted{}, after, exportRows)
			if err != nil {
				return err
			}
			for j := range rows {
				if err := out.Write(&rows[j].Record); err != nil {
					return err
				}
				after = rows[j].Number
			}
			if len(rows) == 0 {
				break
			}
			if err := r.Context().Err(); err != nil {
				return err
			}
		}
	}
	return nil
}
