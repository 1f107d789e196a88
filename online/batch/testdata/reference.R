# Reference values for batch means and the z that is equivalent to a t; Rscript reference.R
options(digits = 16)
cat("t, df, z with the same tail\n")
for (v in list(c(1e-8, 63), c(.1, 63), c(.8, 63), c(2, 63), c(2, 127), c(-3, 100), c(4.5, 63), c(30, 63), c(1000, 63), c(1.5, 1), c(50, 2.5), c(7.5, 63), c(30, 1000)))
  cat(format(v[1]), v[2], format(sign(v[1]) * -qnorm(pt(-abs(v[1]), v[2], log.p = TRUE), log.p = TRUE)), "\n")
# Beyond 1e-308 by the density's leading term, to 1e-6: log tail of t = 1e6 and 1e100 at 63 degrees
for (t in c(1e6, 1e100)) { l <- lgamma(32) - lgamma(31.5) - .5 * log(pi * 63) + 32 * log(63) - 63 * log(t) - log(63)
  cat(t, 63, format(uniroot(function(z) pnorm(z, lower.tail = FALSE, log.p = TRUE) - l, c(1, 1000), tol = 1e-13)$root), "\n") }

# psi: influence totals of the steps; m steps a batch; the rest of the series is left out of s^2 and r1
batch <- function(psi, m, n) {
  B <- length(psi) %/% m
  p <- sapply(seq_len(B), function(b) sum(psi[((b - 1) * m + 1):(b * m)]))
  r1 <- acf(p, lag.max = 1, plot = FALSE)$acf[2]
  r <- max(0, r1 + 1 / sqrt(B))
  cat(B, "batches, r1", format(r1), "variance", format(var(p) * length(psi) / m / n^2 * (1 + r) / (1 - r)), "\n")
}
cat("rivers, one unit a step: "); x <- as.numeric(rivers); batch(x - mean(x), 2, length(x))
n <- 1 + seq_along(x) %% 3
cat("rivers a mean over 1 + t mod 3 units: "); R <- sum(x) / sum(n); batch(x - R * n, 2, sum(n))
cat("rivers over w = units times 1 + t mod 7: ")
w <- n * (1 + seq_along(x) %% 7); mx <- sum(x) / sum(n); mw <- sum(w) / sum(n); batch((x - n * mx) / mw - mx / mw^2 * (w - n * mw), 2, sum(n))
cat("discoveries, one unit a step: "); x <- as.numeric(discoveries); batch(x - mean(x), 1, length(x))
cat("their differences: "); x <- diff(x); batch(x - mean(x), 1, length(x))
cat("Nile, one unit a step: "); x <- as.numeric(Nile); batch(x - mean(x), 1, length(x))
