# What R's boot package (Canty and Ripley, after Davison and Hinkley 1997) makes
# of the air-conditioning data (Proschan 1963) and of the yearly coal-mining
# explosions 1851-1962 (Jarrett 1979), as lines "name value".
library(boot)
say <- function(name, x) cat(name, format(x, digits = 12), "\n")
set.seed(20260301)
R <- 4999
air <- c(3, 5, 7, 18, 43, 85, 91, 98, 100, 130, 230, 487)
b <- boot(air, function(d, i) mean(d[i]), R = R)
l <- empinf(b, type = "jack")
say("air.error", sd(b$t))
p <- boot.ci(b, type = "perc")$percent
say("air.percentile.lower", p[4]); say("air.percentile.upper", p[5])
p <- boot.ci(b, type = "bca", L = l)$bca
say("air.bca.lower", p[4]); say("air.bca.upper", p[5])
years <- as.vector(table(factor(floor(coal$date), levels = 1851:1962)))
for (wrap in c(FALSE, TRUE)) {
  b <- tsboot(years, mean, R = R, l = 5, sim = "fixed", endcorr = wrap)
  name <- paste0("coal.", if (wrap) "wrapped" else "moving")
  say(paste0(name, ".error"), sd(b$t))
  q <- boot:::norm.inter(b$t, c(0.025, 0.975))[, 2]
  say(paste0(name, ".lower"), q[1]); say(paste0(name, ".upper"), q[2])
}
