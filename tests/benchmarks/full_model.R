# Rscript full_model.R FOLDER REPEATS: fit the model of FOLDER/model.txt to FOLDER/bins.csv with mgcv's
# bam(discrete=TRUE); CPU seconds of every fit go to seconds.json, expected counts to expected.bin.
suppressMessages(library(mgcv))

# B-splines with derivative penalty (class "bs") in coordinates whose squares integrate to one. As margins of
# te() they give the penalties integral of f_xx^2 and of f_yy^2 themselves; te() by itself replaces the
# integral over the other axis by a sum over its coefficients.
smooth.construct.unit.smooth.spec <- function(object, data, knots) {
  class(object) <- "bs.smooth.spec"
  object <- smooth.construct(object, data, knots)
  points <- c(-0.861136311594053, -0.339981043584856, 0.339981043584856, 0.861136311594053)  # Gauss-Legendre
  quadrature <- c(0.347854845137454, 0.652145154862546, 0.652145154862546, 0.347854845137454)
  inner <- object$knots[4:(length(object$knots) - 3)]
  spacing <- diff(inner)[1]
  at <- as.vector(outer(points * spacing / 2, inner[-length(inner)] + spacing / 2, "+"))
  values <- splines::splineDesign(object$knots, at, ord = 4)
  object$turn <- solve(chol(crossprod(values, values * rep(quadrature, length(inner) - 1))))
  object$X <- object$X %*% object$turn
  object$S <- lapply(object$S, function(penalty) crossprod(object$turn, penalty) %*% object$turn)
  object$D <- NULL
  class(object) <- c("unit.smooth", class(object))
  object
}
Predict.matrix.unit.smooth <- function(object, data) {
  class(object) <- class(object)[-1]
  Predict.matrix(object, data) %*% object$turn
}

arguments <- commandArgs(TRUE)
folder <- arguments[1]
bins <- read.csv(file.path(folder, "bins.csv"))
lines <- readLines(file.path(folder, "model.txt"))
knots <- eval(parse(text = lines[2]))
seconds <- c()
for (repetition in seq_len(as.integer(arguments[2]))) {
  before <- proc.time()
  fit <- bam(as.formula(lines[1]), family = poisson(), data = bins, knots = knots,
             discrete = TRUE, method = "fREML", nthreads = 1)
  seconds <- c(seconds, sum((proc.time() - before)[c("user.self", "sys.self")]))
}
cat("[", paste(seconds, collapse = ", "), "]\n", sep = "", file = file.path(folder, "seconds.json"))
writeBin(as.numeric(fitted(fit)), file.path(folder, "expected.bin"))
