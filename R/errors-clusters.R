# Clustered errors of pooled fits and of averages, few clusters, common shocks: cluster ids from
# column names, what the core refuses, and what a reader should know of the result.

#' @exportS3Method
error_covariance.lb_err_cluster <- function(errors, fit, call = rlang::caller_env()) {
  averaged <- inherits(fit, "lb_premia") && fit$kind == "traits"
  if (!averaged && !inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Fit the same formula with {.fn pooled}; {.fn error_ladder} shows both side by side.", call)
  }
  if (!is.null(errors$few)) {
    return(few_clusters_covariance(errors, fit, call))
  }
  codes <- lapply(errors$ways, cluster_codes, panel = fit$panel, call = call)
  code <- lapply(codes, `[[`, "code")
  n_codes <- vapply(codes, `[[`, 1, "n")
  result <- if (averaged) {
    cpp_clustered_average(
      fit$design, fit$panel$period, period_weights(fit, call), unname(fit$estimate), code, n_codes, errors$small
    )
  } else {
    cpp_clustered(estimation_design(fit), fit$panel$period, length(fit$panel$periods), fit$core, code, n_codes, errors$small, thread_count())
  }
  refuse_missing_cluster(result, errors, fit, call)
  result <- core_result(result, call)
  warn_cluster_trouble(result, errors, fit)
  if (!averaged && errors$small != "none") result$vcov <- result$vcov * effects_factor(fit, errors$ways, call)
  aliased <- if (averaged) rep(FALSE, length(fit$terms)) else fit$core$aliased
  bad <- rep(FALSE, length(fit$terms))
  bad[!aliased] <- result$not_positive
  list(
    vcov = blank_nonpositive(expand_aliased(result$vcov, aliased), fit$terms, bad), df = min(result$n_groups) - 1,
    n_groups = stats::setNames(result$n_groups, errors$ways),
    phrase = paste0(
      "any correlation inside clusters of ",
      paste0(errors$ways, " (", format_count(result$n_groups), ")", collapse = " and of "),
      if (averaged) ", from the observations' rows of the average",
      if (result$n_clipped > 0) "; repaired to be positive semidefinite"
    )
  )
}

# Cross-products and scores of each cluster of one way.
cluster_moments <- function(way, errors, fit, call) {
  if (!inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "They are for pooled fits: fit the same formula with {.fn pooled}.", call)
  }
  codes <- cluster_codes(way, fit$panel, call)
  refuse_crossing(fit, way, errors, call)
  moments <- cpp_cluster_moments(
    estimation_design(fit), fit$panel$period, length(fit$panel$periods), fit$core, codes$code, codes$n
  )
  refuse_missing_cluster(moments, list(ways = way), fit, call)
  row_result(moments, fit$panel, call = call)
}

few_clusters_covariance <- function(errors, fit, call) {
  moments <- cluster_moments(errors$ways, errors, fit, call)
  cr2 <- errors$few == "cr2"
  found <- core_result(cpp_few_clusters(moments, if (cr2) 0.5 else 1), call)
  if (found$undecided > 0) {
    abort_sample(c(
      "The jackknife needs the fit without each cluster of {.val {errors$ways}}; without one of them a coefficient is not identified.",
      i = "Use {.code few = \"cr2\"}, or drop the term that only one cluster has."
    ), column = errors$ways, call = call)
  }
  kept <- !fit$core$aliased
  df <- rep(NA_real_, length(kept))
  df[kept] <- found$df
  list(
    vcov = expand_aliased(found$vcov, fit$core$aliased), df = if (cr2) df else found$n_groups - 1,
    n_groups = stats::setNames(found$n_groups, errors$ways),
    phrase = paste0(
      "few clusters of ", errors$ways, " (", format_count(found$n_groups), "), ",
      if (cr2) "CR2 (Bell-McCaffrey 2002), Satterthwaite df" else "CR3, the cluster jackknife"
    )
  )
}

#' @exportS3Method
error_covariance.lb_err_wild <- function(errors, fit, call = rlang::caller_env()) {
  moments <- cluster_moments(errors$way, errors, fit, call)
  out <- error_covariance(err_cluster(errors$way), fit, call)
  G <- ncol(moments$s)
  complete <- errors$draws == "rademacher" && 2^G <= errors$reps
  if (!complete) stats::runif(1)
  reference <- list(
    kind = "wild", moments = moments, complete = complete, restricted = errors$null, draws = errors$draws,
    reps = if (complete) 2^G else errors$reps, kept = !fit$core$aliased, theta = unname(fit$estimate),
    seed = if (!complete) get(".Random.seed", envir = globalenv())
  )
  reference$at <- wild_limits(reference, wild_signs(reference), 0.95)
  out$reference <- reference
  out$phrase <- paste0(
    "wild bootstrap of ", format_count(G), " clusters of ", errors$way, ", ",
    if (complete) paste0("all ", format_count(2^G), " sign vectors") else paste0(format_count(errors$reps), " draws (", errors$draws, ")"),
    if (!errors$null) ", residuals of the estimate"
  )
  out
}

# G x draws, from the generator as it stands.
wild_signs <- function(reference) {
  G <- ncol(reference$moments$s)
  if (reference$complete) {
    return(unname(t(as.matrix(expand.grid(rep(list(c(-1, 1)), G))))))
  }
  values <- if (reference$draws == "webb") c(-1, 1) %o% sqrt(c(1.5, 1, 0.5)) else c(-1, 1)
  matrix(sample(as.vector(values), G * reference$reps, replace = TRUE), G)
}

# The draws that belong to a fit, made again: they would take more room than the fit itself.
wild_signs_again <- function(reference) {
  if (!reference$complete) {
    now <- get0(".Random.seed", envir = globalenv())
    on.exit(if (is.null(now)) rm(".Random.seed", envir = globalenv()) else assign(".Random.seed", now, envir = globalenv()))
    assign(".Random.seed", reference$seed, envir = globalenv())
  }
  wild_signs(reference)
}

# p-values of zero, and limits.
wild_limits <- function(reference, signs, level) {
  kept <- reference$kept
  found <- core_result(cpp_wild(
    reference$moments, reference$theta[kept], signs, reference$complete, reference$restricted, level
  ))
  lapply(found, function(value) {
    out <- rep(NA_real_, length(kept))
    out[kept] <- value
    out
  })
}

# The weight of each period of the panel in the average, 0 where it was not estimated.
period_weights <- function(fit, call) {
  if (fit$average == "precision") {
    abort_unsupported("Averages with weights of their own for each term have no rows of observations: use {.code average = \"equal\"} or {.val assets}.", call = call)
  }
  used <- fit$sections$status == "estimated"
  weights <- if (fit$average == "assets") fit$sections$n_used * used else as.numeric(used)
  weights / sum(weights)
}

#' @exportS3Method
error_covariance.lb_err_common <- function(errors, fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_pooled")) {
    return(sum_over_periods(errors, fit, call))
  }
  scores <- row_result(
    cpp_period_scores(estimation_design(fit), fit$panel$period, length(fit$panel$periods), fit$core, thread_count()), fit$panel, call = call
  )
  present <- which(rowSums(scores != 0) > 0)
  T <- length(present)
  if (T < 2L) {
    abort_sample("Common shocks need two periods or more with rows in the estimate.", call = call)
  }
  weights <- as.numeric(fit$terms[!fit$core$aliased] != "(Intercept)")
  if (!any(weights > 0)) weights[] <- 1
  sum <- core_result(cpp_sum_series(scores[present, , drop = FALSE], fit$panel$slot[present] - 1L, weights, series_options(errors)), call)
  factor <- if (errors$adjust) T / (T - 1) * (fit$n_used - 1) / (fit$n_used - fit$rank) * effects_factor(fit, "period", call) else 1
  list(
    vcov = blank_nonpositive(expand_aliased(sum$S * factor, fit$core$aliased), fit$terms), df = T - 1,
    lags = sum$lags, bandwidth = sum$bandwidth,
    phrase = paste0(
      "common shocks of ", count_of(T, period_noun(fit$panel)), " that persist (Driscoll-Kraay 1998), ",
      kernel_name(errors$kernel), " kernel, ", count_of(sum$lags, "lag"),
      if (!is.numeric(errors$lags)) paste0(" (", lag_rule_name(errors$lags), ")")
    )
  )
}

cluster_codes <- function(way, panel, call) {
  key <- names(panel$key)[match(way, panel$key)]
  if (is.na(key) && !way %in% names(panel$data) && way %in% c("asset", "period")) key <- way
  if (!is.na(key)) {
    codes <- if (key == "asset") panel$asset else panel$period
    return(list(code = codes, n = length(if (key == "asset") panel$assets else panel$periods)))
  }
  check_column(panel$data, way, "err_cluster", call)
  value <- panel$data[[way]]
  if (is.logical(value)) value <- as.integer(value)
  encoded <- encode_key(value, way, "cluster", call)
  list(code = encoded$code, n = length(encoded$values))
}

refuse_missing_cluster <- function(result, errors, fit, call) {
  if (!inherits(result, "lb_core_error")) {
    return(invisible())
  }
  facts <- result$facts
  if (result$tag == "cluster_id") {
    way <- errors$ways[facts$dimension]
    row <- facts$row
    asset <- fit$panel$assets[fit$panel$asset[row] + 1L]
    period <- user_periods(fit$panel$periods)[fit$panel$period[row] + 1L]
    abort_input(
      c(
        "The cluster id {.val {way}} is missing in {facts$count} row{?s} that entered the estimate.",
        x = "The first is row {row}: {format_key(asset)} in {format_key(period)}.",
        i = "Fill the ids, or take those rows out of the panel before estimating."
      ),
      column = way, row = row, asset = asset, period = period, count = facts$count, call = call
    )
  }
  if (result$tag == "clusters") {
    way <- errors$ways[facts$dimension]
    abort_sample(
      c("All rows are in one cluster of {.val {way}}: there is no variation between clusters.", i = "Use another way."),
      column = way, call = call
    )
  }
}

warn_cluster_trouble <- function(result, errors, fit) {
  nested <- which(result$nested_in > 0)
  if (length(nested)) {
    inner <- errors$ways[nested]
    outer <- errors$ways[result$nested_in[nested]]
    warn_class("covariance", c(
      "Clusters {.val {inner}} lie inside clusters {.val {outer}}: the result is that of {.val {unique(outer)}} alone.",
      i = "Name only the coarser one."
    ), column = inner)
  }
  if (result$n_clipped > 0) {
    warn_class("covariance", c(
      "The clustered covariance was not positive semidefinite (smallest eigenvalue {signif(result$min_eigen_relative, 2)} of the largest); {result$n_clipped} negative eigenvalue{?s} set to zero.",
      i = "Few clusters in one way do that: look at one-way errors too."
    ), min_eigen_relative = result$min_eigen_relative)
  }
}
