# The pooled fit beside which bench:fit times ours: reads the sites' CSV files with R's base reader, then fits once for each
# line on standard input, a threshold of convergence. One line of JSON an answer.
arguments <- commandArgs(trailingOnly = TRUE)
loss <- arguments[1]
lambda <- as.numeric(arguments[2])
mix <- as.numeric(arguments[3])
folds <- as.integer(arguments[4])
files <- arguments[-(1:4)]
suppressPackageStartupMessages(library(glmnet))

reading <- system.time({
  rows <- do.call(rbind, lapply(files, read.csv))
  columns <- grep("^x", names(rows))
  x <- as.matrix(rows[, columns])
  y <- rows$y
  offset <- if (loss == "poisson") log(rows$exposure) else NULL
})
rm(rows)
cat(sprintf('{"reading": %.4f}\n', reading[["elapsed"]]))

# the package divides y by its spread s, and with it the squared part of the penalty by s once more (its manual, "Details"):
# both parts are given such that the objective is ours
if (loss == "squared" && lambda > 0) {
  spread <- sqrt(mean((y - mean(y))^2))
  parts <- c(lambda * mix, lambda * (1 - mix) * spread)
  lambda <- sum(parts)
  mix <- parts[1] / lambda
}
family <- c(squared = "gaussian", logistic = "binomial", poisson = "poisson")[[loss]]
penalised <- function(threshold) {
  fit <- glmnet(x, y, family = family, offset = offset, alpha = mix, lambda = lambda, thresh = threshold, maxit = 1e6)
  as.numeric(coef(fit))
}
path <- function(threshold) {
  fit <- cv.glmnet(x, y, family = family, offset = offset, alpha = mix, nfolds = folds, nlambda = 30,
                   lambda.min.ratio = 0.01, thresh = threshold)
  as.numeric(coef(fit, s = "lambda.min"))
}
unpenalised <- function(threshold) {
  fit <- glm.fit(cbind(1, x), y, family = poisson(), offset = offset, control = list(epsilon = threshold))
  as.numeric(fit$coefficients)
}
answer <- function(name, method, threshold) {
  invisible(gc())
  taken <- system.time(coefficients <- method(threshold))[["elapsed"]]
  cat(sprintf('{"method": "%s", "seconds": %.4f, "coefficients": [%s]}\n', name, taken,
              paste(sprintf("%.17g", coefficients), collapse = ", ")))
}
input <- file("stdin", "r")
repeat {
  line <- readLines(input, 1)
  if (length(line) == 0) break
  answer("glmnet", if (folds > 0) path else penalised, as.numeric(line))
  if (lambda == 0 && folds == 0) answer("glm", unpenalised, as.numeric(line))
  cat('{"done": true}\n')
}
