# When is it signalled that fewer soldiers die, and how high was the winter?
#
#   Rscript nightingale.R nightingale.csv
#
# For each month and cause, with base R alone: the rate per 1,000 men and year,
# the conditional two-rate test against July to December 1854 in both tails with
# its critical count, and the same with the spread of those six months.

deaths <- read.csv(commandArgs(trailingOnly = TRUE)[1])
names(deaths) <- c("month", "series", "events", "exposure")
stopifnot(nrow(deaths) == 72)
limit <- 0.001
per <- 12000 # 1,000 men, 12 months

past <- deaths$month >= "1854-07" & deaths$month <= "1854-12"
fmt <- function(x) sprintf("%.17g", x)
cat(sprintf("# limit: %g\n", limit))

# Summed from the masses: R's own pbinom(log.p = TRUE) is off by 0.004 at 1e-461.
log10_sum <- function(logs) (max(logs) + log(sum(exp(logs - max(logs))))) / log(10)

looks <- NULL
for (cause in c("army/disease", "army/wounds", "army/other")) {
  of <- deaths[deaths$series == cause, ]
  six <- deaths[past & deaths$series == cause, ]
  m <- sum(six$events)
  f <- sum(six$exposure)
  usual <- m / f * six$exposure
  # variance over mean of the six months (Pearson, five degrees of freedom)
  phi <- sum((six$events - usual)^2 / usual) / 5
  cat(sprintf("# reference %s: %d deaths in %d man-months\n", cause, m, f))
  cat(sprintf("# spread %s: %s\n", cause, fmt(phi)))
  for (i in seq_len(nrow(of))) {
    n <- of$events[i]
    e <- of$exposure[i]
    q <- e / (e + f)
    upper <- binom.test(n, n + m, q, alternative = "greater")$p.value
    lower <- binom.test(n, n + m, q, alternative = "less")$p.value
    two <- poisson.test(c(n, m), c(e, f), alternative = "less")$p.value
    stopifnot(abs(lower - two) <= 1e-12 * lower)
    k <- 0:3000
    low <- pbinom(k, k + m, q)
    high <- pbinom(k - 1, k + m, q, lower.tail = FALSE)
    ratio <- poisson.test(c(n, m), c(e, f))
    rate <- poisson.test(n, e)
    # the predictive test: negative binomial with the estimate's own variance
    wide <- phi * (1 + e / f)
    clumped <- pnbinom(n, size = m / f * e / (wide - 1), prob = 1 / wide)
    looks <- rbind(looks, data.frame(
      month = of$month[i], series = cause, events = n, exposure = e, expected = m / f * e,
      upper = upper, lower = lower,
      log10_upper = log10_sum(dbinom(n:(n + m), n + m, q, log = TRUE)),
      log10_lower = log10_sum(dbinom(0:n, n + m, q, log = TRUE)),
      critical_upper = min(k[high <= limit]), size_upper = high[min(which(high <= limit))],
      critical_lower = max(k[low <= limit]), size_lower = low[max(which(low <= limit))],
      rate = n / e * per, rate_lower = rate$conf.int[1] * per, rate_upper = rate$conf.int[2] * per,
      ratio = (n / e) / (m / f), ratio_lower = ratio$conf.int[1], ratio_upper = ratio$conf.int[2],
      clumped = clumped
    ))
  }
}

watched <- looks$month >= "1855-01"
for (cause in unique(looks$series)) {
  of <- looks[watched & looks$series == cause, ]
  first <- function(hit) if (any(hit)) of$month[which(hit)[1]] else "none"
  cat(sprintf("# first above %s: %s\n", cause, first(of$upper <= limit)))
  cat(sprintf("# first below %s: %s\n", cause, first(of$lower <= limit)))
  cat(sprintf("# first below with spread %s: %s\n", cause, first(of$clumped <= limit)))
}
for (i in seq_along(looks)) {
  if (is.double(looks[[i]])) looks[[i]] <- fmt(looks[[i]])
}
write.csv(looks, row.names = FALSE, quote = FALSE)
