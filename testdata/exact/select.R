# Reads a table of units (CSV on standard input: events, exposure, baseline) and writes what R makes
# of it: p by ppois, adjusted by p.adjust, and for the rows that Benjamini and Hochberg's procedure
# selects at 0.05 the bounds of the rate by poisson.test, at 0.05 times the share selected.
x <- read.csv(file("stdin"))
p <- ppois(x$events - 1, x$exposure * x$baseline, lower.tail = FALSE)
bh <- p.adjust(p, "BH")
alpha <- 0.05 * mean(bh <= 0.05)
bounds <- sapply(seq_along(p), function(i) {
  if (bh[i] > 0.05) c(NA, NA) else poisson.test(x$events[i], x$exposure[i], conf.level = 1 - alpha)$conf.int
})
out <- list(holm_p = p.adjust(p, "holm"), bh_p = bh, hochberg_p = p.adjust(p, "hochberg"), by_p = p.adjust(p, "BY"),
            fcr_alpha = ifelse(bh > 0.05, NA, alpha), fcr_rate_lower = bounds[1, ], fcr_rate_upper = bounds[2, ])
write.csv(lapply(out, function(v) ifelse(is.na(v), "", sprintf("%.17g", v))), row.names = FALSE, quote = FALSE)
