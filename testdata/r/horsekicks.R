# Which years of which corps signal, if 0.7 deaths a corps-year are usual?
#
#   Rscript horsekicks.R horsekicks.csv
#
# For each corps and year the deaths, and with base R alone the exact Poisson
# tail; then the critical count, its attained size, and the number of signals
# that 280 looks bring by chance.

rows <- read.csv(commandArgs(trailingOnly = TRUE)[1], check.names = FALSE)
deaths <- rows$events
exposure <- rows[["exposure[corps-years]"]]
stopifnot(nrow(rows) == 280, sum(deaths) == 196, sum(exposure) == 280, length(unique(rows$series)) == 14)
stopifnot(identical(as.integer(table(deaths)), c(144L, 91L, 32L, 11L, 2L)))

usual <- sum(deaths) / sum(exposure)
limit <- 0.01
size <- ppois((0:20) - 1, usual, lower.tail = FALSE)
critical <- min((0:20)[size <= limit])

p <- ppois(deaths - 1, usual * exposure, lower.tail = FALSE)
tested <- mapply(function(n, e) poisson.test(n, e, usual, alternative = "greater")$p.value, deaths, exposure)
stopifnot(all(abs(p - tested) <= 1e-12 * p))

cat(sprintf("# usual: %.17g\n", usual))
cat(sprintf("# limit: %g\n", limit))
cat(sprintf("# critical: %d\n", critical))
cat(sprintf("# size: %.17g\n", size[critical + 1]))
cat(sprintf("# by chance: %.17g\n", nrow(rows) * size[critical + 1]))
looks <- data.frame(
  series = rows$series, year = rows$date, events = deaths,
  p = sprintf("%.17g", p), signals = as.integer(p <= limit)
)
write.csv(looks, row.names = FALSE, quote = FALSE)
