# Reads lines "set shape guess lapse x n k" from standard input, fits every set with
# glm, a binomial family and a link with the asymptotes built in, and prints
# "set intercept slope log-likelihood" with the log-likelihood without binomial coefficients.
asymptotes <- function(shape, g, l) {
  base <- make.link(c(logistic = "logit", gaussian = "probit", gumbel = "cloglog")[[shape]])
  rise <- 1 - g - l
  inside <- function(f) pmin(pmax(f, 1e-12), 1 - 1e-12)
  structure(list(
    linkfun = function(mu) base$linkfun(inside((mu - g) / rise)),
    linkinv = function(eta) g + rise * base$linkinv(eta),
    mu.eta = function(eta) rise * base$mu.eta(eta),
    valideta = function(eta) TRUE, name = "asymptotes"), class = "link-glm")
}
table <- read.table(file("stdin"), col.names = c("set", "shape", "g", "l", "x", "n", "k"))
for (s in unique(table$set)) {
  d <- table[table$set == s, ]
  link <- asymptotes(d$shape[1], d$g[1], d$l[1])
  start <- c(-0.5, 1) # a low start: glm diverges from steep ones
  fit <- suppressWarnings(glm(cbind(k, n - k) ~ x, data = d, family = binomial(link), start = start,
    control = glm.control(epsilon = 1e-14, maxit = 500)))
  p <- fitted(fit)
  term <- function(k, p) ifelse(k > 0, k * log(p), 0)
  cat(sprintf("%d %.15g %.15g %.15g\n", s, coef(fit)[1], coef(fit)[2], sum(term(d$k, p) + term(d$n - d$k, 1 - p))))
}
