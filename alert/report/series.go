package report

import (
	"cmp"
	"math"
	"slices"
	"strings"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/estimate"
)

// series takes the indicator's series with their pictures.
func (r *Recorder) series(in *Indicator, h *estimate.History, o Options) {
	cfg := in.Cfg
	funnel := &figure.Funnel{
		Title: cfg.Title + ": each series against all", Events: cfg.EventNoun, Exposure: cfg.Unit,
		Rate: per(in), Per: cfg.Per, Proportion: cfg.Measure == config.Proportion,
	}
	shared := sharedEnd(h)
	for i := range h.Series {
		s := &Series{Name: h.Series[i].Name, Missing: h.Series[i].Missing}
		exposure := 0.0
		for _, x := range h.Series[i].Slots {
			s.Events += x.Events
			exposure += x.Exposure
		}
		s.Exposure = words.Number(exposure)
		s.rate(cfg, exposure)
		if in.Estimate != nil && i < len(in.Estimate.Series) && in.Estimate.Series[i].Name == s.Name {
			s.Exposure = words.Grouped(in.Estimate.Series[i].Exposure)
		}
		for j := range in.Alerts {
			if in.Alerts[j].Series == s.Name {
				s.Alerts++
			}
		}
		funnel.Units = append(funnel.Units, figure.Unit{Name: strings.TrimSuffix(s.Name, shared), Events: s.Events, Exposure: exposure})
		in.Series = append(in.Series, s)
	}
	if len(funnel.Units) > 1 {
		in.Funnel = funnel
	}
	shown := slices.Clone(in.Series)
	slices.SortStableFunc(shown, func(a, b *Series) int { return cmp.Compare(b.Alerts, a.Alerts) })
	if len(shown) > o.Pictures {
		in.LeftOut = len(shown) - o.Pictures
		shown = shown[:o.Pictures]
	}
	for _, s := range shown {
		r.draw(in, s)
	}
}

func (s *Series) rate(cfg *config.Indicator, exposure float64) {
	if exposure == 0 {
		s.Rate, s.Upper = math.NaN(), math.NaN()
		return
	}
	s.Rate = float64(s.Events) / exposure * cfg.Per
	if cfg.Measure == config.Proportion {
		s.Lower, s.Upper = exact.ClopperPearson(s.Events, int64(math.Round(exposure)), cfg.Alpha)
		s.Lower, s.Upper = s.Lower*cfg.Per, s.Upper*cfg.Per
		return
	}
	s.Lower, s.Upper = exact.Garwood(s.Events, cfg.Alpha)
	s.Lower, s.Upper = s.Lower/exposure*cfg.Per, s.Upper/exposure*cfg.Per
}

// sharedEnd is the last part of the names if all series have the same, with the
// slash before it.
func sharedEnd(h *estimate.History) string {
	last := ""
	for i := range h.Series {
		at := strings.LastIndexByte(h.Series[i].Name, '/')
		if at <= 0 || last != "" && h.Series[i].Name[at:] != last {
			return ""
		}
		last = h.Series[i].Name[at:]
	}
	return last
}
