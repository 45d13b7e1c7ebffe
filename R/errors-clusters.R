# Clustered errors of a pooled fit: cluster ids from column names, what the core refuses, and
# what a reader should know of the result.

#' @exportS3Method
error_covariance.lb_err_cluster <- function(errors, fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Fit the same formula with {.fn pooled}; {.fn error_ladder} shows both side by side.", call)
  }
  codes <- lapply(errors$ways, cluster_codes, panel = fit$panel, call = call)
  result <- cpp_clustered(
    fit$design, fit$panel$period, length(fit$panel$periods), fit$core,
    lapply(codes, `[[`, "code"), vapply(codes, `[[`, 1, "n"), errors$small, thread_count()
  )
  refuse_missing_cluster(result, errors, fit, call)
  result <- core_result(result, call)
  warn_cluster_trouble(result, errors, fit)
  vcov <- expand_aliased(result$vcov, fit$core$aliased)
  bad <- rep(FALSE, length(fit$terms))
  bad[!fit$core$aliased] <- result$not_positive
  list(
    vcov = blank_nonpositive(vcov, fit$terms, bad), df = min(result$n_groups) - 1,
    n_groups = stats::setNames(result$n_groups, errors$ways),
    phrase = paste0(
      "any correlation inside clusters of ",
      paste0(errors$ways, " (", format_count(result$n_groups), ")", collapse = " and of "),
      if (result$n_clipped > 0) "; repaired to be positive semidefinite"
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
