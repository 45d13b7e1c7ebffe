#' Classes of the errors that lambdabar raises
#'
#' Every error is a condition of class `lambdabar_error` and of one class below it, so that a
#' script can catch a kind of problem without reading its text. The facts ride as fields of
#' the condition (`column`, `asset`, `period`, `row`, `term`, `count`, where they apply).
#'
#' | class | raised when |
#' | --- | --- |
#' | `lambdabar_error_keys` | asset or period keys are missing, duplicated, or of a type that cannot be a key |
#' | `lambdabar_error_input` | an argument or a column is not what the verb needs |
#' | `lambdabar_error_no_variation` | a term never varies inside any period, so that no cross-section can say anything about it |
#' | `lambdabar_error_rank` | the regressors are collinear in every usable period, or betas are |
#' | `lambdabar_error_sample` | too few assets, periods or clusters are left |
#' | `lambdabar_error_unsupported` | an error structure, test or method does not apply to this estimate |
#'
#' Two warnings share the scheme: `lambdabar_warning_covariance` (a covariance that is not
#' positive semidefinite, or a variance that is not positive) and `lambdabar_warning_sample`
#' (many periods or rows left out, collinear terms set to `NA`). One message,
#' `lambdabar_message_keys`, says how a period key was read.
#'
#' @examples
#' market <- demo_market(firms = 20, months = 24)
#' doubled <- rbind(market, market[5, ])
#' tryCatch(
#'   asset_panel(doubled, "firm", "month"),
#'   lambdabar_error_keys = function(e) e$rows
#' )
#' @name lambdabar_conditions
NULL

abort_class <- function(kind, message, ..., call, .envir) {
  cli::cli_abort(
    message,
    class = c(paste0("lambdabar_error_", kind), "lambdabar_error"),
    ...,
    call = call,
    .envir = .envir
  )
}

abort_keys <- function(message, ..., call = rlang::caller_env(), .envir = parent.frame()) {
  abort_class("keys", message, ..., call = call, .envir = .envir)
}

abort_input <- function(message, ..., call = rlang::caller_env(), .envir = parent.frame()) {
  abort_class("input", message, ..., call = call, .envir = .envir)
}

abort_no_variation <- function(message, ..., call = rlang::caller_env(),
                               .envir = parent.frame()) {
  abort_class("no_variation", message, ..., call = call, .envir = .envir)
}

abort_rank <- function(message, ..., call = rlang::caller_env(), .envir = parent.frame()) {
  abort_class("rank", message, ..., call = call, .envir = .envir)
}

abort_sample <- function(message, ..., call = rlang::caller_env(), .envir = parent.frame()) {
  abort_class("sample", message, ..., call = call, .envir = .envir)
}

abort_unsupported <- function(message, ..., call = rlang::caller_env(),
                              .envir = parent.frame()) {
  abort_class("unsupported", message, ..., call = call, .envir = .envir)
}

warn_class <- function(kind, message, ..., .envir = parent.frame()) {
  cli::cli_warn(
    message,
    class = c(paste0("lambdabar_warning_", kind), "lambdabar_warning"),
    ...,
    .envir = .envir
  )
}

# The core reports a request that it cannot meet as a list (see src/guard.h); here it becomes
# the condition of its class. `explain` adds what only the verb knows.
core_result <- function(result, call = rlang::caller_env(), explain = list()) {
  if (!inherits(result, "lb_core_error")) {
    return(result)
  }
  if (result$tag == "interrupted") {
    rlang::interrupt()
  }
  kinds <- c(
    rank = "rank", no_variation = "no_variation", constant_factor = "no_variation",
    unsupported = "unsupported", too_few = "sample", too_few_rows = "sample", clusters = "sample"
  )
  kind <- kinds[result$tag]
  kind <- if (is.na(kind)) "input" else unname(kind)
  rlang::inject(abort_class(
    kind, c("{result$message}", i = explain[[result$tag]]),
    tag = result$tag, !!!result$facts, call = call, .envir = rlang::current_env()
  ))
}

# "a", "a and b", "a, b and c", "a, b, c and 4 more": the first few of many offenders.
first_few <- function(x, n = 5L) {
  x <- as.character(x)
  if (length(x) > n) {
    paste0(paste(x[seq_len(n)], collapse = ", "), " and ", length(x) - n, " more")
  } else if (length(x) > 1L) {
    paste0(paste(x[-length(x)], collapse = ", "), " and ", x[length(x)])
  } else {
    x
  }
}
