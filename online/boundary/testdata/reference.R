# Reference values for the boundaries by plain root finding in R; prints them to 15 digits.
# Rscript reference.R
options(digits = 15)
find <- function(f, lo, hi) uniroot(f, c(lo, hi), tol = 1e-15)$root

half_logE <- function(z, U) { x <- z * sqrt(U / (1 + U)); log(2) - log1p(U) / 2 + x^2 / 2 + pnorm(x, log.p = TRUE) }
half_crit <- function(a, U) find(function(z) half_logE(z, U) + log(a), 0, 50)
cat("half-normal mixture: alpha, U, critical\n")
for (a in c(.05, .01, 1e-6)) for (U in c(.1, 1, 8, 100, 1e4)) cat(a, U, format(half_crit(a, U)), "\n")
cat("half-normal mixture: alpha, U at which the threshold is smallest, threshold\n")
for (a in c(.1, .05, .01, .001)) { o <- optimize(function(l) half_crit(a, exp(l)), c(0, 4), tol = 1e-10); cat(a, exp(o$minimum), format(o$objective), "\n") }

one <- function(A) 1 - pnorm(A) + dnorm(A) * (A + dnorm(A) / pnorm(A))
weight <- function(z) z^2 + 2 * pnorm(z, log.p = TRUE)
oneA <- function(a) find(function(A) one(A) - a, -5, 10)
cat("one-sided delayed start: alpha, A\n")
for (a in c(.5, .1, .05, .01, .001)) cat(a, format(oneA(a)), "\n")
cat("one-sided delayed start: alpha, ratio, critical\n")
for (a in c(.05, .01)) for (r in c(1, 2, 10, 1000)) cat(a, r, format(find(function(z) weight(z) - weight(oneA(a)) - log(r), -5, 20)), "\n")
cat("one-sided delayed start: z, ratio, p\n")
for (z in c(-1, 0, 1, 3, 4.5)) for (r in c(1, 5, 100)) cat(z, r, format(one(find(function(x) weight(x) - weight(z) + log(r), -30, 20))), "\n")

two <- function(A) 2 * (1 - pnorm(A) + A * dnorm(A))
cat("the one-sided error of the two-sided delayed start at 2 alpha: alpha, half mixture's error at that A\n")
for (a in c(.05, .01)) cat(a, format(one(find(function(A) two(A) - 2 * a, 0, 10))), "\n")
