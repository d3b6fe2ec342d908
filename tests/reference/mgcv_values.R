# Rscript mgcv_values.R: writes data/mgcv_values.json, what mgcv makes of the data in data/ with its own bases.
# Rscript mgcv_values.R FOLDER: writes data/mgcv_engine_values.json, what it makes of the engine's matrices that
# `python test_engine_matrices.py FOLDER` wrote to FOLDER.
suppressMessages(library(mgcv))

number <- function(x) paste0("[", paste(sprintf("%.12g", x), collapse = ", "), "]")
some <- function(x) x[seq(1, length(x), by = if (length(x) > 100) 10 else 1)]  # every tenth of many rows
entry <- function(name, fit, score = TRUE) {
  link <- predict(fit, se.fit = TRUE)
  parts <- c(strengths = number(if (length(fit$sp)) fit$sp else fit$full.sp), edf = number(sum(fit$edf)),
             deviance = number(deviance(fit)), score = if (score) number(fit$gcv.ubre),
             fitted = number(some(fitted(fit))), link_error = number(some(link$se.fit)))
  paste0("\"", name, "\": {\n", paste0("  \"", names(parts), "\": ", parts, collapse = ",\n"), "\n}")
}
save <- function(entries, path) writeLines(paste0("{\n", paste(entries, collapse = ",\n"), "\n}"), path)
closely <- gam.control(epsilon = 1e-13, newton = list(conv.tol = 1e-10))

# Penalties are divided by S.scale, and a tensor product's margins by their largest eigenvalue before.
scales <- function(fit) unlist(lapply(fit$smooth, function(s) s$S.scale))
with_scales <- function(text, fit) sub("\n}$", paste0(",\n  \"scales\": ", number(scales(fit)), "\n}"), text)

own_bases <- function() {
  out <- c()
  neurone <- read.csv("data/motoneurone_counts.csv")
  size <- 20
  spacing <- 500 / (size - 3)
  knots <- list(time_ms = -250 + spacing * (-3:size))
  for (order in 1:2) {
    formula <- as.formula(sprintf("count ~ s(time_ms, bs = 'bs', k = %d, m = c(3, %d)) + offset(rep(log(4.69), 50))", size, order))
    run <- function(name, ...) {
      fit <- gam(formula, family = poisson, data = neurone, knots = knots, method = "REML", control = closely, ...)
      with_scales(entry(paste0("line_", order, "_", name), fit), fit)
    }
    fast <- bam(formula, family = poisson, data = neurone, knots = knots, method = "fREML",
                control = gam.control(epsilon = 1e-13))
    out <- c(out, run("reml"), run("stiff", sp = 30), run("loose", sp = 1e-3),
             with_scales(entry(paste0("line_", order, "_fast"), fast, score = FALSE), fast))
  }
  arena <- read.csv("data/arena_counts.csv")
  # Direction in the middle of 36 sectors, knots every 40 degrees: cyclic cubic splines like the engine's own.
  arena$sector <- (floor(arena$hd / (2 * pi) * 36) + 0.5) * 2 * pi / 36
  surface <- count ~ te(x, y, bs = "ps", k = c(6, 6), m = list(c(2, 2), c(2, 2))) +
    s(hd, bs = "cc", k = 10) + offset(log(occ))
  circle <- count ~ s(sector, bs = "cc", k = 10) + offset(log(occ))
  for (model in c("surface", "circle")) {
    knots <- list(hd = c(0, 2 * pi), sector = seq(0, 2 * pi, length = 10))
    run <- function(name, ...) {
      fit <- gam(get(model), family = poisson, data = arena, knots = knots, method = "REML", control = closely, ...)
      with_scales(entry(paste0(model, "_", name), fit), fit)
    }
    fast <- bam(get(model), family = poisson, data = arena, knots = knots, method = "fREML",
                control = gam.control(epsilon = 1e-13))
    stiff <- if (model == "surface") c(5, 20, 50) else 50
    loose <- if (model == "surface") c(0.5, 300, 4) else 0.1
    out <- c(out, run("reml"), run("stiff", sp = stiff), run("loose", sp = loose),
             with_scales(entry(paste0(model, "_fast"), fast, score = FALSE), fast))
  }
  save(out, "data/mgcv_values.json")
}

# A smooth whose matrix and penalties are given.
smooth.construct.given.smooth.spec <- function(object, data, knots) {
  object$X <- object$xt$X[data[[object$term]], , drop = FALSE]
  object$S <- object$xt$S
  object$rank <- sapply(object$S, function(S) sum(diag(S) > 0))
  object$null.space.dim <- sum(diag(Reduce("+", object$S)) == 0)
  object$C <- matrix(0, 0, ncol(object$X))
  object$side.constrain <- FALSE
  class(object) <- "given.smooth"
  object
}
Predict.matrix.given.smooth <- function(object, data) object$xt$X[data[[object$term]], , drop = FALSE]

engine_matrices <- function(folder) {
  read <- function(name) as.matrix(unname(read.csv(file.path(folder, name), header = FALSE)))
  X <- read("design.csv")
  rows <- read.csv(file.path(folder, "rows.csv"))
  spectra <- read("spectra.csv")
  strengths <- read("log_strengths.csv")
  ends <- read("ends.csv")
  given <- lapply(seq_len(length(ends) - 1), function(k) {
    columns <- (ends[k] + 1):ends[k + 1]
    own <- spectra[rowSums(spectra[, columns]) > 0, columns, drop = FALSE]
    list(X = X[, columns], S = lapply(seq_len(nrow(own)), function(j) diag(own[j, ])))
  })
  rows[paste0("row", seq_along(given))] <- seq_len(nrow(rows))
  smooths <- sprintf("s(row%d, bs = 'given', k = %d, xt = given[[%d]])", seq_along(given), diff(as.vector(ends)),
                     seq_along(given))
  formula <- as.formula(paste("count ~", paste(smooths, collapse = " + "), "+ offset(log(seconds))"))
  out <- c()
  for (k in seq_len(nrow(strengths))) {
    fit <- gam(formula, family = poisson, data = rows, sp = exp(strengths[k, ]), method = "REML",
               control = gam.control(epsilon = 1e-13, scalePenalty = FALSE))
    out <- c(out, entry(paste0("fixed_", k), fit))
  }
  fast <- bam(formula, family = poisson, data = rows, method = "fREML",
              control = gam.control(epsilon = 1e-13, scalePenalty = FALSE))
  save(c(out, entry("fast", fast, score = FALSE)), "data/mgcv_engine_values.json")
}

arguments <- commandArgs(TRUE)
if (length(arguments)) engine_matrices(arguments[1]) else own_bases()
