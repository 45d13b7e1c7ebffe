#' Test linear restrictions on premia or coefficients
#'
#' @param fit From [price_traits()], [price_factors()] or [pooled()].
#' @param ... Restrictions as strings, tested jointly. A string is an equation such as
#'   `"size = 0"`, `"mkt = 0.005"` or `"2 * size - value = turnover"`; a term alone means that
#'   it is zero. Terms that are no plain names stand as they are when alone on a side
#'   (`"log(mcap) = 0"`) and in backticks otherwise. Without any, all premia but the constant
#'   are tested to be zero.
#'
#' @details
#' The statistic is \eqn{(L\theta - r)'(L V L')^{-}(L\theta - r)/q} with the covariance V of
#' the fit's error structure, against F with q and the fit's degrees of freedom; with
#' [err_cosine()] scaled by (B - q + 1)/B, against q and B - q + 1. When
#' \eqn{LVL'} is singular, as with more restrictions than clusters, its generalised inverse is
#' used and q is its rank; `note` says so.
#'
#' @return A tibble of class `lb_test` with one row: `test`, `statistic` (F), `num.df`,
#'   `den.df`, `p.value`, `note`.
#'
#' @section Errors:
#' `lambdabar_error_input` for text that is no equation, is not linear, or names no term;
#' `lambdabar_error_rank` when every restricted combination has no variance.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 80, months = 60), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value + turnover)
#' term_test(fit)
#' term_test(fit, "size = 0", "value = 0.003")
#' @export
term_test <- function(fit, ...) {
  check_fit(fit)
  text <- list(...)
  if (!all(vapply(text, is.character, NA))) {
    abort_input("Restrictions are strings such as {.val size = 0}.")
  }
  text <- unlist(text)
  if (is.null(text)) text <- setdiff(fit$terms[is.finite(fit$estimate)], "(Intercept)")
  if (!length(text)) {
    abort_input("The fit has no term but the constant: name a restriction.")
  }
  restrictions <- lapply(text, parse_restriction, terms = fit$terms)
  L <- do.call(rbind, lapply(restrictions, `[[`, "row"))
  r <- vapply(restrictions, `[[`, 1, "value")
  lost <- fit$terms[colSums(L != 0) > 0 & !is.finite(diag(vcov(fit)))]
  if (length(lost)) {
    abort_input("{.val {lost}} {?has/have} no estimate or no error in this fit.", term = lost)
  }
  present <- is.finite(fit$estimate) & is.finite(diag(vcov(fit)))
  wald <- core_result(cpp_wald(
    unname(fit$estimate[present]), unname(vcov(fit)[present, present, drop = FALSE]), L[, present, drop = FALSE], r
  ))
  if (wald$rank == 0) {
    abort_rank("The restricted combinations have no variance under these errors.")
  }
  law <- wald_law(fit$covariance, wald)
  new_test(
    test = paste(text, collapse = ", "), statistic = law$statistic, num.df = wald$rank, den.df = law$den,
    p.value = law$p,
    note = paste(c(
      if (wald$rank < length(text)) paste0(length(text), " restrictions, but rank ", wald$rank, ": generalised inverse"),
      law$note
    ), collapse = "; "),
    title = "Linear restrictions", subtitle = paste0("Errors: ", fit$covariance$phrase)
  )
}

# F form of a Wald statistic and its p-value. Cosines have a Hotelling scaling; fixed-b values
# are known for one restriction only, resampled ones for single coefficients.
wald_law <- function(covariance, wald) {
  q <- wald$rank
  den <- min(covariance$df, na.rm = TRUE)
  statistic <- wald$statistic / q
  if (!is.null(covariance$cosines)) {
    den <- covariance$cosines - q + 1
    statistic <- statistic * den / covariance$cosines
  }
  kind <- covariance$reference$kind
  if (identical(kind, "fixed_b") && q == 1) {
    return(list(statistic = statistic, den = den, p = fixed_b_p(sqrt(statistic), covariance$reference$b), note = "fixed-b p-value"))
  }
  list(
    statistic = statistic, den = den, p = stats::pf(statistic, q, den, lower.tail = FALSE),
    note = if (!is.null(kind)) "F distribution: the fit's own critical values are for single terms"
  )
}

# "lhs = rhs" as L and r with L theta = r, found by evaluating lhs - rhs at the origin and at
# each unit vector; a random point tells whether it is linear.
parse_restriction <- function(text, terms, call = rlang::caller_env()) {
  sides <- trimws(strsplit(text, "=", fixed = TRUE)[[1L]])
  if (length(sides) == 1L) sides <- c(sides, "0")
  if (length(sides) != 2L || !all(nzchar(sides))) {
    abort_input("{.val {text}} is not an equation with two sides.", call = call)
  }
  expressions <- lapply(sides, function(side) {
    if (side %in% terms) {
      return(as.name(side))
    }
    parsed <- tryCatch(parse(text = side, keep.source = FALSE), error = function(e) NULL)
    if (length(parsed) != 1L) {
      abort_input("Cannot read {.val {side}} in {.val {text}}.", call = call)
    }
    parsed[[1L]]
  })
  unknown <- setdiff(unlist(lapply(expressions, all.vars)), terms)
  if (length(unknown)) {
    abort_input("{.val {unknown}} in {.val {text}} {cli::qty(unknown)}{?is/are} not among the terms: {.val {terms}}.", term = unknown, call = call)
  }
  arithmetic <- list2env(mget(c("+", "-", "*", "/", "^", "("), envir = baseenv()), parent = emptyenv())
  difference <- function(theta) {
    values <- stats::setNames(as.list(theta), terms)
    side <- function(e) eval(e, values, arithmetic)
    side(expressions[[1L]]) - side(expressions[[2L]])
  }
  P <- length(terms)
  out <- tryCatch(
    {
      constant <- difference(numeric(P))
      row <- vapply(seq_len(P), function(j) difference(as.numeric(seq_len(P) == j)) - constant, 1)
      probe <- 0.5 + sqrt(seq_len(P) + 1)
      linear <- abs(difference(probe) - constant - sum(row * probe)) < 1e-8 * (1 + sum(abs(row * probe)))
      list(row = row, value = -constant, linear = isTRUE(linear))
    },
    error = function(e) list(linear = FALSE)
  )
  if (!out$linear || !any(out$row != 0)) {
    abort_input("{.val {text}} is not a linear restriction on the terms {.val {terms}}.", call = call)
  }
  out
}

new_test <- function(..., title, subtitle = NULL, reading = NULL) {
  out <- tibble::tibble(...)
  attr(out, "title") <- title
  attr(out, "subtitle") <- subtitle
  attr(out, "reading") <- reading
  class(out) <- c("lb_test", class(out))
  out
}

#' @export
print.lb_test <- function(x, ...) {
  if (!all(c("test", "statistic", "num.df", "den.df", "p.value") %in% names(x))) {
    return(NextMethod())
  }
  shown <- data.frame(
    test = x$test,
    statistic = formatC(x$statistic, digits = 3, format = "f"),
    df = ifelse(
      is.na(x$num.df) | is.na(x$den.df), "", ifelse(is.finite(x$den.df), paste0("F(", x$num.df, ", ", format_df(x$den.df), ")"), paste0("chi2(", x$num.df, ")"))
    ),
    p = format_p(x$p.value)
  )
  if (any(nzchar(x$note))) shown$note <- x$note
  cat_lines(attr(x, "title"))
  if (!is.null(attr(x, "subtitle"))) cat_lines(strwrap(attr(x, "subtitle"), line_width()))
  cat_lines("")
  print_columns(shown, right = c("statistic", "p"), wrap = if (!is.null(shown$note)) "note")
  if (!is.null(attr(x, "reading"))) cat_lines("", strwrap(attr(x, "reading"), line_width()))
  invisible(x)
}

format_df <- function(df) vapply(df, function(d) format(d, digits = 4, big.mark = ","), "")

#' @export
tidy.lb_test <- function(x, ...) {
  class(x) <- setdiff(class(x), "lb_test")
  for (name in c("title", "subtitle", "reading")) attr(x, name) <- NULL
  x
}
