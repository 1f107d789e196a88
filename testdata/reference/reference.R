# Reference values for the estimates and their errors. Run in this folder:
#
#   Rscript reference.R
#
# It writes the data sets, all of which ship with R, as *.csv, and the values as
# reference.txt, one "name value" a line. Values come from the packages named beside
# them; where no package has the quantity, from sums over the units, never from
# moments, which is how the program has them.

suppressPackageStartupMessages({ library(sandwich); library(survey); library(MASS) })

sink_file <- file("reference.txt", "w")
say <- function(name, value) writeLines(sprintf("%s %.17g", name, as.numeric(value)), sink_file)
writeLines(sprintf("# %s, sandwich %s, survey %s, MASS %s", R.version.string,
  packageVersion("sandwich"), packageVersion("survey"), packageVersion("MASS")), sink_file)

write.csv(mtcars[, c("mpg", "wt", "hp", "cyl", "am")], "mtcars.csv", row.names = FALSE, quote = FALSE)
trial <- subset(anorexia, Treat %in% c("Cont", "FT"))
trial <- rbind(subset(trial, Treat == "Cont"), subset(trial, Treat == "FT"))
write.csv(trial, "anorexia.csv", row.names = FALSE, quote = FALSE)
write.csv(attenu[, c("event", "accel")], "attenu.csv", row.names = FALSE, quote = FALSE)
write.csv(sleep, "sleep.csv", row.names = FALSE, quote = FALSE)

# One mean: t.test. One ratio: survey::svyratio, svymean under simple random sampling.
one <- t.test(mtcars$mpg)
say("mean.value", one$estimate); say("mean.se", one$stderr)
say("mean.low", one$conf.int[1]); say("mean.high", one$conf.int[2])
srs <- svydesign(ids = ~1, data = mtcars, weights = ~1)
r <- svyratio(~mpg, ~wt, srs)
say("ratio.value", coef(r)); say("ratio.se", SE(r))
weighted <- svydesign(ids = ~1, data = mtcars, weights = ~cyl)
h <- svymean(~mpg, weighted)
say("hajek.value", coef(h)); say("hajek.se", SE(h))

# The set of ratios R that a t test of mean(mpg - R wt) does not reject, by root search.
reject <- function(R) { t <- t.test(mtcars$mpg - R * mtcars$wt); abs(t$statistic) - qt(.975, 31) }
say("ratio.low", uniroot(reject, c(1, coef(r)), tol = 1e-14)$root)
say("ratio.high", uniroot(reject, c(coef(r), 12), tol = 1e-14)$root)

# Skewness of the ratio's influence values.
phi <- with(mtcars, (mpg - coef(r) * wt) / mean(wt))
say("ratio.skewness", mean(phi^3) / mean(phi^2)^1.5)
say("ratio.heaviest", max(phi^2) / sum(phi^2))

# Two arms: Welch's t.test.
ft <- trial$Postwt[trial$Treat == "FT"]; cont <- trial$Postwt[trial$Treat == "Cont"]
w <- t.test(ft, cont)
say("difference.value", mean(ft) - mean(cont)); say("difference.se", w$stderr)
say("difference.df", w$parameter); say("difference.t", w$statistic)
say("difference.low", w$conf.int[1]); say("difference.high", w$conf.int[2])
fit <- lm(Postwt ~ Treat, data = droplevels(trial))
say("difference.hc2", sqrt(vcovHC(fit, "HC2")[2, 2]))

# Relative lift: delta method on sandwich's HC2 of the two means, and the set of lifts L
# that mean(ft) - (1 + L) mean(cont) does not reject at the normal quantile.
cell <- lm(Postwt ~ 0 + Treat, data = droplevels(trial))
V <- vcovHC(cell, "HC2"); m <- coef(cell)
lift <- m[2] / m[1] - 1
g <- c(-m[2] / m[1]^2, 1 / m[1])
say("lift.value", lift); say("lift.se", sqrt(g %*% V %*% g))
gl <- c(-1 / m[1], 1 / m[2])
say("lift.log.se", sqrt(gl %*% V %*% gl))
stat <- function(L) { a <- c(-(1 + L), 1); abs(sum(a * m)) / sqrt(a %*% V %*% a) - qnorm(.975) }
say("lift.low", uniroot(stat, c(-.5, lift), tol = 1e-14)$root)
say("lift.high", uniroot(stat, c(lift, 1), tol = 1e-14)$root)

# Difference and lift of ratios between arms: svyratio by arm, independent.
arm <- function(a) { r <- svyratio(~mpg, ~wt, svydesign(ids = ~1, data = subset(mtcars, am == a), weights = ~1)); c(coef(r), SE(r)) }
r1 <- arm(1); r0 <- arm(0)
say("ratios.value", r1[1] - r0[1]); say("ratios.se", sqrt(r1[2]^2 + r0[2]^2))
say("ratios.lift.value", r1[1] / r0[1] - 1)
logse <- sqrt((r1[2] / r1[1])^2 + (r0[2] / r0[1])^2)
say("ratios.lift.se", r1[1] / r0[1] * logse)
say("ratios.lift.low", exp(log(r1[1] / r0[1]) - 2 * logse) - 1)   # at 2 standard errors
say("ratios.lift.high", exp(log(r1[1] / r0[1]) + 2 * logse) - 1)

# Units of several records: sandwich::vcovCL, without and with G/(G-1).
records <- lm(accel ~ 1, data = attenu)
say("cluster.value", coef(records))
say("cluster.cr0", sqrt(vcovCL(records, cluster = attenu$event, type = "HC0", cadjust = FALSE)))
say("cluster.se", sqrt(vcovCL(records, cluster = attenu$event, type = "HC0", cadjust = TRUE)))
paired <- lm(extra ~ group, data = sleep)
say("paired.value", coef(paired)[2])
say("paired.se", sqrt(vcovCL(paired, cluster = sleep$ID, type = "HC0", cadjust = TRUE)[2, 2]))

# Adjustment with interactions (Lin 2013): the value from the interacted regression, the
# standard error from the residuals of the regressions by arm, divided by n-1-p, and the
# spread over all units of what the slopes' difference explains, divided by n-1.
# "finite.se" is without the latter.
lin <- function(y, x, treated) {
  X <- scale(as.matrix(x), scale = FALSE); n <- length(y); p <- ncol(X)
  full <- lm(y ~ treated * X)
  f1 <- lm(y ~ X, subset = treated == 1); f0 <- lm(y ~ X, subset = treated == 0)
  part <- function(f) { k <- length(resid(f)); sum(resid(f)^2) / (k * (k - 1 - p)) }
  through <- function(b) { h <- X %*% b; sum((h - mean(h))^2) / (n * (n - 1)) }
  b <- coef(f1)[-1] - coef(f0)[-1]
  v <- c(part(f1), part(f0), through(b))
  list(df = sum(v)^2 / sum(v^2 / c(f1$df.residual, f0$df.residual, n - 1)), # Welch, Satterthwaite
    value = coef(full)[["treated"]], m1 = coef(f1)[[1]], m0 = coef(f0)[[1]],
    finite = sqrt(part(f1) + part(f0)), se = sqrt(part(f1) + part(f0) + through(b)), b1 = coef(f1)[-1], b0 = coef(f0)[-1])
}
# The same unit by unit, for any gradient in the adjusted means: "se" with n-1-p and n-1,
# "n.form" with n.
influence <- function(y, x, treated, gradient) { # y: k columns; gradient: 2 x k, arm 1 first
  Y <- as.matrix(y); X <- as.matrix(x); n <- nrow(Y); p <- ncol(X); xbar <- colMeans(X)
  psi <- psi.n <- numeric(n)
  for (a in 1:0) {
    i <- which(treated == a); f <- lm(Y[i, , drop = FALSE] ~ X[i, , drop = FALSE])
    b <- matrix(coef(f), ncol = ncol(Y))[-1, , drop = FALSE]; g <- gradient[2 - a, ]
    e <- matrix(resid(f), ncol = ncol(Y)) %*% g
    through <- sweep(X, 2, xbar) %*% b %*% g
    psi[i] <- psi[i] + e / sqrt(length(i) * (length(i) - 1 - p)); psi <- psi + through / sqrt(n * (n - 1))
    psi.n[i] <- psi.n[i] + e / length(i); psi.n <- psi.n + through / n
  }
  list(se = sqrt(sum(psi^2)), n.form = sqrt(sum(psi.n^2)), psi = psi)
}
means <- function(y, x, treated, a) {
  X <- scale(as.matrix(x), scale = FALSE)
  matrix(coef(lm(as.matrix(y) ~ X, subset = treated == a)), ncol = NCOL(y))[1, ]
}
A <- as.numeric(trial$Treat == "FT")
one <- lin(trial$Postwt, trial$Prewt, A)
say("lin.value", one$value); say("lin.m1", one$m1); say("lin.m0", one$m0)
say("lin.b1", one$b1); say("lin.b0", one$b0); say("lin.se", one$se); say("lin.finite.se", one$finite)
say("lin.n.form", influence(trial$Postwt, trial$Prewt, A, rbind(1, -1))$n.form)
say("lin.df", one$df)
say("lin.psi.se", influence(trial$Postwt, trial$Prewt, A, rbind(1, -1))$se)
say("lin.heaviest", max(influence(trial$Postwt, trial$Prewt, A, rbind(1, -1))$psi^2) / one$se^2)
u <- influence(trial$Postwt, trial$Prewt, A, rbind(1, -1))$psi[A == 1]; u <- u - mean(u)
say("lin.skewness.ft", mean(u^3) / mean(u^2)^1.5)
two <- lin(mtcars$mpg, mtcars[, c("wt", "hp")], mtcars$am)
say("lin2.value", two$value); say("lin2.se", two$se); say("lin2.df", two$df)
say("lin2.n.form", influence(mtcars$mpg, mtcars[, c("wt", "hp")], mtcars$am, rbind(1, -1))$n.form)

# Adjusted lift of means, and adjusted ratios.
L <- one$m1 / one$m0 - 1
i <- influence(trial$Postwt, trial$Prewt, A, rbind(1 / one$m0, -one$m1 / one$m0^2))
say("lin.lift.value", L); say("lin.lift.se", i$se); say("lin.lift.n.form", i$n.form)
stat <- function(L) abs(one$m1 - (1 + L) * one$m0) / influence(trial$Postwt, trial$Prewt, A, rbind(1, -(1 + L)))$se - 2
say("lin.lift.low", uniroot(stat, c(-.5, L), tol = 1e-14)$root)   # at 2 standard errors
say("lin.lift.high", uniroot(stat, c(L, 1), tol = 1e-14)$root)
v <- cbind(mtcars$mpg, mtcars$wt)
m1 <- means(v, mtcars$hp, mtcars$am, 1); m0 <- means(v, mtcars$hp, mtcars$am, 0)
R1 <- m1[1] / m1[2]; R0 <- m0[1] / m0[2]
say("lin.ratio.r1", R1); say("lin.ratio.r0", R0)
i <- influence(v, mtcars$hp, mtcars$am, rbind(c(1, -R1) / m1[2], -c(1, -R0) / m0[2]))
say("lin.ratio.se", i$se); say("lin.ratio.n.form", i$n.form)
i <- influence(v, mtcars$hp, mtcars$am, rbind(c(1 / m1[1], -1 / m1[2]), -c(1 / m0[1], -1 / m0[2])))
say("lin.ratio.log.se", i$se)

# Quantiles of Student's law, and score intervals of a proportion (prop.test).
for (df in c(1, 2.5, 4, 5.5, 9, 22.6204693784764, 80.25, 400, 999, 1000, 31234.5, 1e7))
  for (p in c(.9, .975, .995, .9995, .999999)) say(sprintf("qt(%s,%.17g)", format(p, digits = 7), df), qt(p, df))
for (x in list(c(0, 20), c(1, 29), c(15, 148), c(81, 263), c(20, 20))) {
  ci <- prop.test(x[1], x[2], correct = FALSE)$conf.int
  say(sprintf("wilson(%d,%d).low", x[1], x[2]), ci[1]); say(sprintf("wilson(%d,%d).high", x[1], x[2]), ci[2])
}
close(sink_file)
