# Reads cases (CSV on standard input, as tailbell exact writes them) and adds R's own answers:
# p (one-sided, by ppois/pbinom/phyper), and the bounds of the rate or proportion (by
# qgamma/qbeta) at level 0.95.
x <- read.csv(file("stdin"), colClasses = "numeric", check.names = FALSE)
upper <- x$tail == 0
n <- x$events; m <- x$reference_events
size <- x$size; ref <- x$reference
p <- rep(NA, nrow(x)); lo <- p; hi <- p
tails <- function(up, lower) ifelse(upper, up, lower)
i <- x$kind == 1 # known rate
mu <- x$baseline * size
p <- ifelse(i, tails(ppois(n - 1, mu, lower.tail = FALSE), ppois(n, mu)), p)
i <- x$kind == 2 # known proportion
p <- ifelse(i, suppressWarnings(tails(pbinom(n - 1, size, x$baseline, lower.tail = FALSE), pbinom(n, size, x$baseline))), p)
i <- x$kind == 3 # two rates
q <- size / (size + ref)
p <- ifelse(i, tails(pbinom(n - 1, n + m, q, lower.tail = FALSE), pbinom(n, n + m, q)), p)
i <- x$kind == 4 # two proportions
p <- ifelse(i, suppressWarnings(tails(phyper(n - 1, size, ref, n + m, lower.tail = FALSE), phyper(n, size, ref, n + m))), p)
prop <- x$kind == 2 | x$kind == 4
lo <- ifelse(prop, suppressWarnings(ifelse(n == 0, 0, qbeta(0.025, n, size - n + 1))), qgamma(0.025, n) / size)
hi <- ifelse(prop, suppressWarnings(ifelse(n == size, 1, qbeta(0.025, n + 1, size - n, lower.tail = FALSE))), qgamma(0.025, n + 1, lower.tail = FALSE) / size)
write.csv(data.frame(p = sprintf("%.17g", p), lower = sprintf("%.17g", lo), upper = sprintf("%.17g", hi)), row.names = FALSE, quote = FALSE)
