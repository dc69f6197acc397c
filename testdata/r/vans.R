# Are fewer drivers of vans killed since belts must be worn?
#
#   Rscript vans.R vans.csv
#
# For each window of 6, 12 and 23 months that ends after January 1983, with base R
# alone: the conditional two-rate test against February 1981 to January 1983 in the
# lower tail, and the ratio with its exact bounds. The counts are compared with
# those that R itself holds (datasets::Seatbelts).

vans <- read.csv(commandArgs(trailingOnly = TRUE)[1])
names(vans) <- c("month", "events", "exposure")
stopifnot(nrow(vans) == 192, all(vans$events == Seatbelts[, "VanKilled"]), all(vans$exposure == Seatbelts[, "kms"]))
limit <- 0.05
fmt <- function(x) sprintf("%.17g", x)
cat(sprintf("# limit: %g\n", limit))

past <- vans$month >= "1981-02" & vans$month <= "1983-01"
m <- sum(vans$events[past])
f <- sum(vans$exposure[past])
cat(sprintf("# reference: %d deaths over %d\n", m, f))

looks <- NULL
for (months in c(6, 12, 23)) {
  for (last in which(vans$month >= "1983-02")) {
    inside <- (last - months + 1):last
    n <- sum(vans$events[inside])
    e <- sum(vans$exposure[inside])
    ratio <- poisson.test(c(n, m), c(e, f))
    looks <- rbind(looks, data.frame(
      window = sprintf("%dmo", months), to = vans$month[last], events = n, exposure = e, expected = m / f * e,
      p = poisson.test(c(n, m), c(e, f), alternative = "less")$p.value,
      ratio = (n / e) / (m / f), ratio_lower = ratio$conf.int[1], ratio_upper = ratio$conf.int[2]
    ))
  }
}
for (w in unique(looks$window)) {
  lit <- looks$to[looks$window == w & looks$p <= limit]
  cat(sprintf("# first %s: %s\n", w, if (length(lit)) min(lit) else "none"))
}
cat(paste(names(looks), collapse = ","), "\n", sep = "")
for (i in seq_len(nrow(looks))) {
  row <- lapply(looks[i, ], function(x) if (is.numeric(x)) fmt(x) else x)
  cat(paste(row, collapse = ","), "\n", sep = "")
}
