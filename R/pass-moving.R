# price_factors() with betas that move, or that are corrected for their error: every row of
# the panel gets the betas that were known before its period, and each period's cross-section
# has them on its right side.

price_moving <- function(panel, formula, exposure, method, intercept, traits, min_assets,
                         correct, beta_lag, call = rlang::caller_env()) {
  if (method == "gls") {
    abort_unsupported(c(
      "GLS needs one set of betas for the whole sample, not betas that move or are corrected.",
      i = "Use {.code method = \"ols\"} or {.val wls}."
    ), call = call)
  }
  first_pass <- moving_first_pass(panel, formula, exposure, call)
  if (correct != "none" && first_pass$shrink != "none") {
    abort_unsupported(c(
      "Shrunken betas cannot be corrected again: shrinkage is a correction itself.",
      i = "Use {.code correct = \"none\"}, or betas with {.code shrink = \"none\"}."
    ), call = call)
  }
  asked <- dates_before(panel, first_pass, beta_lag, call)
  use <- betas_in_use(first_pass, asked, correct, method, call)
  colnames(use$beta) <- first_pass$terms
  design <- moving_design(panel, formula, first_pass, use, intercept, traits, method, call)
  full <- first_pass$window$kind == "full"
  fit <- if (correct == "bias" && full) {
    fit_pooled_corrected(panel, design, use, min_assets, call)
  } else {
    fit_moving_sections(panel, design, use, correct, full, min_assets, call)
  }
  noun <- period_noun(first_pass$panel)
  fit$method <- method
  fit$intercept <- intercept
  fit$correct <- correct
  fit$beta_lag <- if (full) NA_real_ else beta_lag
  fit$first_pass <- first_pass[c("window", "lead_lag", "lead_lag_form", "shrink", "terms")]
  fit$betas <- use$beta
  if (full) fit$factors <- `colnames<-`(first_pass$factors[first_pass$panel$slot, , drop = FALSE], first_pass$terms)
  fit$reliability <- beta_reliability(use, panel)
  fit$exposure_phrase <- paste0(
    format(first_pass$window, noun = noun),
    if (!full) paste0(", known ", count_of(beta_lag, period_noun(panel)), " before"),
    if (sum(first_pass$lead_lag)) paste0("; ", lead_lag_phrase(first_pass)),
    if (first_pass$shrink != "none") paste0("; shrunk, ", shrink_phrase(first_pass$shrink))
  )
  fit
}

# Betas from the panel itself through a window, or those that exposures() has defined, on this
# panel or on another one (days, say).
moving_first_pass <- function(panel, formula, exposure, call) {
  if (inherits(exposure, "lb_window")) {
    return(new_first_pass(panel, factor_design(panel, formula, call), exposure, call = call))
  }
  first_pass <- exposure$first_pass
  factors <- attr(stats::terms(formula), "term.labels")
  unknown <- setdiff(factors, first_pass$terms)
  if (length(unknown) || length(factors) != length(first_pass$terms)) {
    abort_input(c(
      "The formula must have the factors of {.arg exposure} on its right side.",
      x = "It has {.val {factors}}; the exposures are to {.val {first_pass$terms}}."
    ), call = call)
  }
  if (first_pass$window$kind == "full" && !identical(first_pass$panel$periods, panel$periods)) {
    abort_unsupported("Full-sample exposures of another panel cannot price this one: use a moving window.", call = call)
  }
  first_pass
}

# For each row of the panel, which asset and which last slot of the first pass it may see.
dates_before <- function(panel, first_pass, lag, call) {
  own <- first_pass$panel
  same <- identical(panel$periods, own$periods) && panel$frequency == own$frequency
  last <- if (first_pass$window$kind == "full") {
    rep(max(own$slot), length(panel$periods))
  } else if (same) {
    panel$slot - lag
  } else {
    last_slots_of_units(panel, own, lag, call)
  }
  data_asset <- match(panel$assets, own$assets)
  if (all(is.na(data_asset))) {
    abort_input("No asset of the panel is among the assets of {.arg exposure}.", call = call)
  }
  data_asset[is.na(data_asset)] <- 0L
  list(
    asset = panel$asset, time = panel$period, data_asset = data_asset - 1L, last_slot = as.integer(last) - 1L
  )
}

# The last slot of a finer panel within the unit (month, say) that lies `lag` units before
# each period.
last_slots_of_units <- function(panel, own, lag, call) {
  unit <- panel$frequency
  dated <- function(labels) inherits(labels, c("Date", "POSIXct", "lb_month"))
  if (!unit %in% c("week", "month", "quarter", "year") || !dated(own$periods)) {
    abort_input(c(
      "The exposures come from a panel with another calendar, and the two cannot be aligned.",
      i = "Both need dates, and the panel that is priced one period a week, month, quarter or year."
    ), call = call)
  }
  before <- calendar_position(panel$periods, unit) - lag
  c(0L, own$slot)[findInterval(before + 0.5, calendar_position(own$periods, unit)) + 1L]
}

# Betas (n x K) of each row, with their packed covariances for a correction; for instruments
# those of both halves.
betas_in_use <- function(first_pass, asked, correct, method, call) {
  wanted <- c("beta", "std_error", if (correct == "bias") "covariance", if (method == "wls") "resid_var")
  if (correct != "instruments") {
    return(answer_exposures(first_pass, asked, wanted, call = call))
  }
  halves <- lapply(0:1, function(half) answer_exposures(first_pass, asked, "beta", half, call)$beta)
  use <- list(halves = halves, beta = (halves[[1L]] + halves[[2L]]) / 2)
  if (method == "wls") use$resid_var <- answer_exposures(first_pass, asked, "resid_var", call = call)$resid_var
  use
}

moving_design <- function(panel, formula, first_pass, use, intercept, traits, method, call) {
  left <- make_design(panel, stats::as.formula(call("~", formula[[2L]], 1), environment(formula)), call = call)
  traits_design <- trait_design(panel, formula, traits, call)
  factors <- first_pass$terms
  terms <- c(if (intercept) "(Intercept)", factors, traits_design$terms)
  refuse_repeats(terms, "the second pass", call = call)
  weight <- if (method == "wls") list(list(x = 1 / use$resid_var, column = 0L, table = NULL))
  list(
    y = left$y, x = c(beta_columns(use$beta), traits_design$x), weight = weight, intercept = intercept, terms = terms,
    variables = c(
      left$variables, rep("beta", length(factors)), traits_design$variables[-1L],
      if (!is.null(weight)) "residual variance"
    ),
    formula = formula
  )
}

# Design columns that read a matrix of betas in place.
beta_columns <- function(betas) {
  lapply(seq_len(ncol(betas)), function(k) list(list(x = betas, column = k - 1L, table = NULL)))
}

fit_moving_sections <- function(panel, design, use, correct, full, min_assets, call) {
  T <- length(panel$periods)
  least <- if (is.null(min_assets)) 0 else min_assets
  K <- ncol(use$beta)
  sections <- switch(correct,
    none = cpp_cross_sections(design, panel$period, T, least, thread_count()),
    bias = cpp_corrected_sections(design, panel$period, T, K, use$covariance, least, thread_count()),
    instruments = {
      halved <- design
      halved$x[seq_len(K)] <- beta_columns(use$halves[[1L]])
      # Betas of the whole sample hold the period's own return in one half: the other half
      # must be the instrument then.
      regressor <- if (full) halves(panel)[panel$slot] else rep(2L, T)
      cpp_instrument_sections(halved, beta_columns(use$halves[[2L]]), panel$period, T, regressor, least, thread_count())
    }
  )
  sections <- row_result(sections, panel, call = call)
  refuse_no_variation(design, sections, call)
  refuse_too_few_periods(design, sections, panel, call)
  used <- which(sections$status == "estimated")
  averaged <- core_result(cpp_average_premia(
    t(sections$coef[, used, drop = FALSE]), t(sections$std_error[, used, drop = FALSE]), sections$n_used[used], "equal"
  ))
  fit <- new_premia(
    kind = "moving", terms = design$terms, averaged = averaged, sections = sections, used = used, panel = panel,
    design = design, formula = design$formula, slot = panel$slot[used]
  )
  fit$nobs <- sum(sections$n_used[used])
  fit$r_squared <- mean(sections$r_squared[used])
  warn_lost_periods(fit)
  fit
}

# Corrected full-sample betas: one pooled regression, whose rows are those of assets.
fit_pooled_corrected <- function(panel, design, use, min_assets, call) {
  T <- length(panel$periods)
  core <- two_pass_result(
    cpp_pooled_corrected(
      design, panel$period, T, ncol(use$beta), use$covariance, panel$asset, length(panel$assets),
      if (is.null(min_assets)) 0 else min_assets, thread_count()
    ), panel, design$terms, call
  )
  P <- length(design$terms)
  sections <- list(
    coef = matrix(NA_real_, P, T), std_error = matrix(NA_real_, P, T), r_squared = rep(NA_real_, T),
    n_used = core$n_used_by_period, status = ifelse(core$n_used_by_period > 0, "pooled", "empty"),
    culprit = rep(NA_integer_, T)
  )
  used <- which(sections$status == "pooled")
  fit <- new_premia(
    kind = "moving", terms = design$terms, averaged = list(estimate = core$estimate, rows = matrix(NA_real_, 0L, P), small_sample = rep(1, P)),
    sections = sections, used = used, panel = panel, design = design, formula = design$formula, slot = panel$slot[used]
  )
  fit$asset_rows <- core$asset_rows
  fit$kappa <- core$kappa
  fit$nobs <- core$n_used
  fit$r_squared <- NA_real_
  fit
}

# Share of the spread of betas within periods that is not their error, by factor.
beta_reliability <- function(use, panel) {
  if (is.null(use$std_error)) {
    return(NULL)
  }
  fine <- is.finite(use$beta[, 1L])
  period <- panel$period[fine]
  beta <- use$beta[fine, , drop = FALSE]
  n <- as.vector(rowsum(rep(1, length(period)), period))
  mean <- rowsum(beta, period) / n
  spread <- colSums((beta - mean[match(period, as.integer(rownames(mean))), , drop = FALSE])^2)
  stats::setNames(pmax(0, 1 - colSums(use$std_error[fine, , drop = FALSE]^2) / spread), colnames(use$beta))
}

is_moving <- function(fit) inherits(fit, "lb_premia") && fit$kind == "moving"

# Shanken's form and the rows of estimated betas do not exist here.
moving_errors <- function(fit) if (is.null(fit$asset_rows)) err_hac() else err_assets()

# What stands in the printout about the betas' own error.
beta_error_lines <- function(fit) {
  shown <- function(x) formatC(x, digits = 2, format = "f")
  reliability <- if (!is.null(fit$reliability)) {
    paste0("spread of the betas that is not their error: ", paste(names(fit$reliability), shown(fit$reliability), collapse = ", "))
  }
  what <- switch(fit$correct,
    none = if (fit$first_pass$shrink == "none") "not corrected: premia are attenuated",
    bias = {
      kappa <- if (is.null(fit$asset_rows)) fit$sections$kappa else fit$kappa
      guarded <- sum(kappa < 1, na.rm = TRUE)
      paste0(
        "error covariance of the betas subtracted (Litzenberger and Ramaswamy 1979)",
        if (guarded > 0) paste0("; in part only in ", if (is.null(fit$asset_rows)) count_of(guarded, period_noun(fit$panel)) else "this sample")
      )
    },
    instruments = paste0(
      "betas of alternate periods as instruments; median strength ",
      shown(stats::median(fit$sections$strength, na.rm = TRUE))
    )
  )
  c(
    label_line("Betas", paste(c(what, reliability), collapse = "; ")),
    if (identical(fit$beta_lag, 0)) label_line("Caution", "betas see the returns that they price (beta_lag = 0)"),
    if (is.null(fit$asset_rows)) {
      label_line("Not in it", "the part of the betas' error that overlapping windows share (of the order of one over the number of assets)")
    }
  )
}
