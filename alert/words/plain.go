package words

// Number writes an expected number or a rate as the sentences do.
func Number(x float64) string { return number(x) }

// Pair writes two bounds as the sentences do: with decimals enough to tell them
// apart.
func Pair(lower, upper float64) (string, string) { return pair(lower, upper) }

// PValue writes p = 10^log10p as the sentences do.
func PValue(log10p float64) string { return pvalue(log10p) }

// Odds writes the chance 10^log10p as "about 1 of 38".
func Odds(log10p float64) string { return odds(log10p) }

// Grouped puts commas between groups of three digits of a plain decimal.
func Grouped(decimal string) string { return grouped(decimal) }

// Length writes a window in words: "28 days".
func Length(window string) string { return length(window) }
