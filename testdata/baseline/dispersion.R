# The conditional p of the dispersion index by R's own simulation, as lines
# "name past draws", from the file of frequencies named on the command line:
# chisq.test(simulate.p.value = TRUE) redraws all counts given
# their total.
set.seed(20260302)
B <- 5000
f <- read.csv(commandArgs(TRUE)[1], comment.char = "#")
for (name in c("bortkiewicz_1898_10_corps", "student_1907_sheet1")) {
  d <- f[f$dataset == name, ]
  x <- rep(d$k, d$units)
  p <- chisq.test(x, simulate.p.value = TRUE, B = B)$p.value
  cat(name, round(p * (B + 1)) - 1, B, "\n")
}
