# When did the coal-mining explosions become rarer than in 1851 to 1875?
#
#   Rscript coal.R coal.csv
#
# For each year's end and each window the number of explosions, and with base
# R alone the conditional two-rate test, the exact bounds and the critical
# count. Written to be independent: the counts come from dates, the p-values
# from binom.test and poisson.test.

events <- as.Date(read.csv(commandArgs(trailingOnly = TRUE)[1])$date)
stopifnot(length(events) == 191, all(diff(events) >= 0))
stopifnot(events[1] == as.Date("1851-03-15"), as.integer(events[191] - events[1]) == 40549)

newyear <- function(year) as.Date(sprintf("%d-01-01", year))
counted <- function(from, to) sum(events >= from & events < to)
days <- function(from, to) as.integer(to - from)

limit <- 0.001
per <- 365.25
reference <- counted(newyear(1851), newyear(1876))
reference_days <- days(newyear(1851), newyear(1876))

look <- function(years, end) {
  from <- newyear(end - years)
  to <- newyear(end)
  n <- counted(from, to)
  e <- days(from, to)
  q <- e / (e + reference_days)
  p <- binom.test(n, n + reference, q, alternative = "less")$p.value
  two <- poisson.test(c(n, reference), c(e, reference_days), alternative = "less")
  stopifnot(abs(p - two$p.value) <= 1e-12 * p)
  k <- 0:200
  size <- pbinom(k, k + reference, q)
  critical <- if (any(size <= limit)) max(k[size <= limit]) else -1
  ratio <- poisson.test(c(n, reference), c(e, reference_days))
  rate <- poisson.test(n, e)
  data.frame(
    window = paste0(years, "y"), from = format(from), to = format(to), events = n, exposure = e,
    expected = reference / reference_days * e, p = p, signals = as.integer(p <= limit),
    critical = critical, size = if (critical < 0) 0 else size[critical + 1],
    rate = n / e * per, rate_lower = rate$conf.int[1] * per, rate_upper = rate$conf.int[2] * per,
    ratio = (n / e) / (reference / reference_days), ratio_lower = ratio$conf.int[1], ratio_upper = ratio$conf.int[2]
  )
}

looks <- NULL
for (end in 1852:1962) {
  for (years in c(5, 10)) {
    if (end - years >= 1851) looks <- rbind(looks, look(years, end))
  }
}

signals <- looks[looks$signals == 1, ]
first <- signals[signals$to == signals$to[1], ]
first <- first[which.min(first$p), ]
cat(sprintf("# reference: %d explosions in %d days\n", reference, reference_days))
cat(sprintf("# limit: %g\n", limit))
cat(sprintf("# first: %s %s\n", first$window, first$to))
for (i in seq_along(looks)) {
  if (is.double(looks[[i]])) looks[[i]] <- sprintf("%.17g", looks[[i]])
}
write.csv(looks, row.names = FALSE, quote = FALSE)
