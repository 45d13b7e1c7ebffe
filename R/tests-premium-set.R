#' Sets of premia that are right whatever the strength of the betas
#'
#' All values of a premium that a test does not reject, where the test holds its size even when
#' a factor is weak or useless. The set can be an interval, two rays, the whole line, or empty,
#' and is reported as what it is (Kleibergen 2009).
#'
#' @param fit From [price_factors()] with betas of the full sample, on a complete panel without
#'   traits.
#' @param term Names of factors; all by default.
#' @param level Confidence level.
#' @param form Critical value: `"f"`, exact under independent normal errors, or `"chisq"`.
#' @param others What is known of the other premia when there are several: `"projection"` (default)
#'   holds under any strength of all betas and is conservative; `"subset"` has K - 1 degrees of
#'   freedom less (Guggenberger, Kleibergen, Mavroeidis and Chen 2012) and relies on homoskedastic
#'   errors.
#' @param target `"realised"`: the premium that the factor earned in this sample (lambda plus
#'   the factor's mean less its expectation), for which the form `"f"` is exact. `"expected"`:
#'   the premium itself, whose set also carries the sampling error of the factor's mean; one
#'   factor only.
#' @param series `NULL`: homoskedastic, serially uncorrelated errors. `err_iid()` or `err_hac()`: rows
#'   that allow for heteroskedasticity and, by lags, autocorrelation; one factor only, and the
#'   default `err_iid()` for `target = "expected"`. With lags the set covers too little unless T is
#'   large against the number of assets.
#'
#' @details
#' A premium l is kept when the intercepts of the regression of returns on f - mean f + l (in
#' contrasts between assets when the second pass has a constant) are not rejected. An unbounded
#' set means that the data cannot bound the premium, as with a useless factor. **Two rays that
#' leave out zero are no evidence that the factor is priced**: a useless factor in a wrong model
#' gives them almost always. An empty set means that the model is rejected, not that the premium is
#' known well. If one factor of several is useless the sets of all premia tend to be unbounded: drop
#' the factor.
#'
#' @return A tibble of class `lb_premium_set` with a row for each piece: `lower`, `upper` (`-Inf`,
#'   `Inf` where unbounded; `NA` for an empty set), `shape` (`"interval"`, `"rays"`, `"line"`,
#'   `"empty"`), `term`, `level`. `glance()` gives the shape of the joint set of all premia
#'   (`"bounded"`, `"unbounded"`, `"empty"`), its p-value of over-identification and the
#'   limited-information estimates. `autoplot()` draws the test over the values of a premium;
#'   with `joint = TRUE` and two factors the joint set.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits, and for several factors where one is asked for;
#' `lambdabar_error_input` for an unknown term; `lambdabar_error_sample` for too few assets or
#' periods (T > N + K is needed); `lambdabar_error_rank` for collinear factors.
#'
#' @references Kleibergen (2009), Journal of Econometrics 149, 149-173. Guggenberger, Kleibergen,
#' Mavroeidis and Chen (2012), Econometrica 80, 2649-2666. Kan and Zhang (1999), Journal of
#' Finance 54, 203-235.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(240, 0.006, 0.045))
#' strong <- f[, "mkt"] %o% seq(0.6, 1.4, length.out = 10) + rnorm(2400, 0, 0.02)
#' premium_set(price_factors(asset_panel(stack_returns(strong, f), "asset", "period"), ret ~ mkt))
#' useless <- matrix(rnorm(2400, 0, 0.02), 240)
#' premium_set(price_factors(asset_panel(stack_returns(useless, f), "asset", "period"), ret ~ mkt))
#' @export
premium_set <- function(fit, term = NULL, level = 0.95, form = "f", others = "projection",
                        target = "realised", series = NULL) {
  check_level(level)
  form <- check_choice(form, c("f", "chisq"), "form")
  others <- check_choice(others, c("projection", "subset"), "others")
  target <- check_choice(target, c("realised", "expected"), "target")
  check_complete_fit(fit, "Premium sets")
  factors <- colnames(fit$first$beta)
  if (is.null(term)) term <- factors
  unknown <- setdiff(term, factors)
  if (!is.character(term) || !length(term) || length(unknown)) {
    abort_input("{.arg term} must be some of the factors {.val {factors}}, not {.val {unknown}}.", term = unknown)
  }
  if (is.null(series) && target == "expected") series <- err_iid()
  if (!is.null(series)) {
    check_series(series)
    if (length(factors) > 1L) {
      abort_unsupported(c(
        "Sets for the expected premium, or under {.arg series}, exist for one factor; here are {length(factors)}.",
        i = "Use {.code target = \"realised\"} and no {.arg series}."
      ))
    }
  }
  K <- length(factors)
  n <- length(fit$alpha) - fit$intercept
  T <- length(fit$kept)
  critical <- set_critical(form, level, n, n, T, K)
  critical_one <- if (others == "subset" && K > 1L) set_critical(form, level, n - K + 1, n, T, K) else critical
  core <- two_pass_result(cpp_premium_sets(fit$input, critical, critical_one), fit$panel, factors)
  sets <- core$each
  if (!is.null(series)) {
    at <- if (form == "f") n * (T - 1) / (T - n) * stats::qf(level, n, T - n) else stats::qchisq(level, n)
    sets <- list(two_pass_result(
      cpp_premium_set_by_scan(fit$input, target == "expected", at, series_options(series), fit$slot_estimated - 1L),
      fit$panel, factors
    ))
  }
  pieces <- lapply(term, function(name) {
    set <- sets[[match(name, factors)]]
    if (set$shape == "empty") set$lower <- set$upper <- NA_real_
    tibble::tibble(lower = set$lower, upper = set$upper, shape = set$shape, term = name, level = level)
  })
  out <- vctrs::vec_rbind(!!!pieces)
  attr(out, "joint") <- tibble::tibble(
    joint = unname(c(interval = "bounded", rays = "unbounded", empty = "empty")[core$joint]),
    overid.statistic = if (n > K) T * core$smallest else NA_real_, overid.df = n - K,
    overid.p.value = if (n > K) stats::pchisq(T * core$smallest, n - K, lower.tail = FALSE) else NA_real_,
    limited = list(stats::setNames(as.numeric(core$estimate), factors))
  )
  attr(out, "forms") <- list(YY = core$YY, one_Q = core$one_Q, critical = critical, critical_one = critical_one, factors = factors, scanned = !is.null(series))
  attr(out, "title") <- paste0(
    "Premia not rejected at ", format(100 * (1 - level)), " %, whatever the strength of the betas\n", deparse1(fit$formula)
  )
  attr(out, "test") <- paste0(
    if (form == "f") "F" else "chi-square", " test, ",
    if (is.null(series)) "homoskedastic errors" else paste0("periods: ", format(series)),
    "; ", if (target == "realised") "premium realised in the sample" else "expected premium",
    if (K > 1L) paste0("; others by ", others)
  )
  structure(out, class = c("lb_premium_set", class(out)))
}

# The value x_c that x(l) is compared with: df of the hypothesis, n contrasts.
set_critical <- function(form, level, df, n, T, K) {
  if (form == "chisq") {
    return(stats::qchisq(level, df) / T)
  }
  if (T - K - n < 1) {
    return(NA_real_)
  }
  df / (T - K - n) * stats::qf(level, df, T - K - n)
}

#' @export
print.lb_premium_set <- function(x, ...) {
  joint <- attr(x, "joint")
  if (is.null(joint) || !all(c("lower", "upper", "shape", "term") %in% names(x))) {
    return(NextMethod())
  }
  cat_lines(strsplit(attr(x, "title"), "\n", fixed = TRUE)[[1L]], "")
  bound <- function(value) ifelse(is.infinite(value), ifelse(value > 0, "infinity", "-infinity"), formatC(value, digits = 4, format = "g"))
  table <- data.frame(
    term = x$term, shape = set_words[x$shape],
    set = ifelse(x$shape == "empty", "", paste(bound(x$lower), "to", bound(x$upper)))
  )
  print_columns(table)
  cat_lines(
    "",
    label_line("Test", attr(x, "test")),
    if (length(attr(x, "forms")$factors) > 1L) label_line("All premia", paste("the joint set is", joint$joint)),
    if (!is.na(joint$overid.p.value)) label_line("Model", paste0("over-identification p = ", format_p(joint$overid.p.value))),
    strwrap(set_reading(x), line_width())
  )
  invisible(x)
}

set_words <- c(interval = "bounded", rays = "two rays", line = "unbounded", empty = "empty")

set_reading <- function(x) {
  unique_rows <- x[!duplicated(x$term), ]
  names_of <- function(shape) first_few(unique_rows$term[unique_rows$shape == shape])
  without_zero <- vapply(split(x, x$term), function(set) {
    set$shape[1L] == "rays" && !any(set$lower <= 0 & set$upper >= 0)
  }, NA)
  paste(c(
    if (any(x$shape == "line")) paste0("The data do not bound the premium of ", names_of("line"), "."),
    if (any(x$shape == "rays")) paste0("The data do not bound the premium of ", names_of("rays"), ": its set is unbounded on both sides."),
    if (any(without_zero)) "That zero lies outside two rays is no evidence of a premium: a useless factor in a wrong model gives such sets almost always.",
    if (any(x$shape == "empty")) paste0("No premium of ", names_of("empty"), " is compatible with the model: it is rejected, not precise."),
    if (any(x$shape == "interval")) {
      bounded <- x[x$shape == "interval", ]
      inside <- vapply(split(bounded, bounded$term), function(set) any(set$lower <= 0 & set$upper >= 0), NA)
      paste0(
        "The premium of ", names_of("interval"), " is bounded; zero is ",
        if (all(inside)) "inside." else if (!any(inside)) "outside." else paste0("outside for ", first_few(names(inside)[!inside]), ".")
      )
    }
  ), collapse = " ")
}

#' @export
tidy.lb_premium_set <- function(x, ...) {
  class(x) <- setdiff(class(x), "lb_premium_set")
  for (name in c("joint", "forms", "title", "test")) attr(x, name) <- NULL
  x
}

#' @export
glance.lb_premium_set <- function(x, ...) attr(x, "joint")

#' @exportS3Method ggplot2::autoplot
autoplot.lb_premium_set <- function(object, joint = FALSE, ...) {
  rlang::check_installed("ggplot2")
  forms <- attr(object, "forms")
  if (isTRUE(joint)) {
    return(draw_joint_set(object, forms))
  }
  if (forms$scanned) {
    abort_unsupported("The picture shows the homoskedastic test: take the set without {.arg series} and {.code target = \"realised\"}.")
  }
  curves <- vctrs::vec_rbind(!!!lapply(unique(object$term), function(name) set_curve(object, forms, name)))
  ends <- tidy(object)
  ends <- ends[ends$shape != "empty", ]
  range_of <- vapply(split(curves$premium, curves$term), range, c(0, 0))
  ends$left <- pmax(ends$lower, range_of[1L, ends$term])
  ends$right <- pmin(ends$upper, range_of[2L, ends$term])
  ggplot2::ggplot(curves, ggplot2::aes(x = .data$premium)) +
    ggplot2::geom_rect(
      data = ends, ggplot2::aes(xmin = .data$left, xmax = .data$right, ymin = 0, ymax = Inf), inherit.aes = FALSE,
      fill = figure_ink[["quiet"]], alpha = 0.25
    ) +
    ggplot2::geom_line(ggplot2::aes(y = .data$ratio), colour = figure_ink[["main"]], linewidth = 0.8) +
    ggplot2::geom_hline(yintercept = 1, linetype = "dashed", colour = figure_ink[["rival"]]) +
    ggplot2::geom_vline(xintercept = 0, linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::facet_wrap(ggplot2::vars(.data$term), scales = "free_x") +
    ggplot2::coord_cartesian(ylim = c(0, min(4, max(curves$ratio) * 1.05))) +
    ggplot2::labs(
      title = "Premia that the test does not reject",
      subtitle = "shaded: the set; it goes on beyond the picture where it is unbounded",
      x = "premium, decimal a period", y = "test statistic over its critical value",
      caption = attr(object, "test")
    ) +
    figure_look()
}

#' @export
plot.lb_premium_set <- function(x, ...) print(ggplot2::autoplot(x, ...))

# The statistic over its critical value along one premium, at the values of the others that
# suit it best.
set_curve <- function(object, forms, name) {
  j <- match(name, forms$factors) + 1L
  set <- object[object$term == name, ]
  ends <- c(set$lower, set$upper)
  ends <- ends[is.finite(ends)]
  estimate <- attr(object, "joint")$limited[[1L]][[name]]
  width <- if (length(ends) > 1L) diff(range(ends)) else 0
  # Where nothing is bounded the picture spans some multiples of the estimate or of the factor.
  if (width == 0) width <- max(abs(c(estimate, ends)), 1 / sqrt(forms$one_Q[j, j]))
  centre <- if (length(ends)) mean(range(ends)) else estimate
  premium <- seq(centre - 1.5 * width, centre + 1.5 * width, length.out = 401L)
  free <- setdiff(seq_len(ncol(forms$YY))[-1L], j)
  smallest <- vapply(premium, function(l) {
    directions <- diag(ncol(forms$YY))[, c(1L, free), drop = FALSE]
    directions[j, 1L] <- -l
    inner <- crossprod(directions, forms$one_Q %*% directions)
    root <- solve(chol(inner))
    form <- crossprod(root, crossprod(directions, forms$YY %*% directions) %*% root)
    min(eigen(form, symmetric = TRUE, only.values = TRUE)$values)
  }, 1)
  tibble::tibble(term = name, premium = premium, ratio = smallest / forms$critical_one)
}

draw_joint_set <- function(object, forms, call = rlang::caller_env(2)) {
  if (length(forms$factors) != 2L) {
    abort_unsupported("The joint set is drawn for two factors; here are {length(forms$factors)}.", call = call)
  }
  curves <- lapply(forms$factors, function(name) range(set_curve(object, forms, name)$premium))
  grid <- expand.grid(x = seq(curves[[1L]][1L], curves[[1L]][2L], length.out = 161L), y = seq(curves[[2L]][1L], curves[[2L]][2L], length.out = 161L))
  v <- rbind(1, -grid$x, -grid$y)
  grid$ratio <- colSums(v * (forms$YY %*% v)) / colSums(v * (forms$one_Q %*% v)) / forms$critical
  ggplot2::ggplot(grid, ggplot2::aes(x = .data$x, y = .data$y, z = .data$ratio)) +
    ggplot2::geom_raster(ggplot2::aes(alpha = .data$ratio <= 1), fill = figure_ink[["quiet"]]) +
    ggplot2::scale_alpha_manual(values = c(`FALSE` = 0, `TRUE` = 0.35), guide = "none") +
    ggplot2::geom_contour(breaks = 1, colour = figure_ink[["main"]], linewidth = 0.8) +
    ggplot2::geom_vline(xintercept = 0, linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::geom_hline(yintercept = 0, linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::labs(
      title = "Pairs of premia that the test does not reject",
      subtitle = paste("the joint set is", attr(object, "joint")$joint),
      x = paste("premium of", forms$factors[1L]), y = paste("premium of", forms$factors[2L]),
      caption = attr(object, "test")
    ) +
    figure_look()
}
