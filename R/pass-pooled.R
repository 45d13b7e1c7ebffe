#' One regression on the whole panel, the rival of averaged premia
#'
#' Ordinary or weighted least squares on all complete rows, with errors that allow for
#' dependence inside clusters.
#'
#' @inheritParams price_traits
#' @param formula Two-sided; see [price_traits()]. Terms may vary over time only, here.
#' @param absorb Names of columns whose effects are taken out, or `NULL`: `"asset"` and `"period"` mean
#'   the panel's keys, `"industry:month"` the effects of each pair. The constant goes with them.
#' @param singletons `"drop"`: rows alone in a group of an effect are left out (again and again, since
#'   leaving one out can leave another alone) and counted. `"keep"`: they stay; slopes are the same,
#'   but n and clusters count rows that say nothing.
#' @param weights Name of a numeric column of analytic weights, or `NULL`. Only their ratios
#'   matter; rows of weight zero do not enter and do not count.
#' @param errors An [error structure][error_structures] for pooled fits: [err_cluster()],
#'   [err_hetero()] or [err_iid()]. `"asset"` and `"period"` mean the panel's keys.
#'
#' @return An object of class `lb_pooled`; see [fit_methods] and [fit_rows]. A term that is a
#'   combination of earlier ones has an estimate of `NA`, and a warning names it.
#'
#' @section Numbers:
#' One pass gives centred cross-products; a design close to singular goes back to the rows and
#' a QR with column pivoting. Errors take a second pass, which recomputes residuals and adds up
#' scores inside clusters; no matrix of scores is kept. Statistics use t with the smallest
#' number of clusters less one for clustered errors, and n - P degrees of freedom otherwise.
#'
#' @section Absorbed effects:
#' Slopes, residuals and errors are those of the regression on all dummies. Columns are taken
#' out of the effects by conjugate gradients until no group mean, in any dimension, is larger than
#' 1e-10 of the column's spread; a column for which that fails is an error, never a number.
#' n - P counts the rank of the dummies: the levels for one dimension, both less the connected
#' components for two; an upper bound for more, and the printout says which. For clustered errors,
#' effects that lie inside the clusters do not count, the others do (at least the constant). R2 is
#' that within the effects. A term that the effects span is `NA`, as any collinear one.
#'
#' @section Errors:
#' * `lambdabar_error_unsupported`: HC2 and HC3, and corrections for few clusters whose effects cross the
#'   clusters, with absorbed effects; effects that do not converge.
#' * `lambdabar_error_input`: formula, weights, cluster columns; a missing cluster id.
#' * `lambdabar_error_sample`: no more complete rows than terms; fewer than two clusters.
#' * `lambdabar_error_rank`: no term could be estimated.
#' * `lambdabar_error_unsupported`: the error structure is for another kind of estimate.
#'
#' @references Petersen (2009), Review of Financial Studies 22, 435-480.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 80, months = 60), "firm", "month")
#' pooled(panel, ret ~ size + value + turnover)
#' pooled(panel, ret ~ size + value + industry, errors = err_cluster("industry", "period"))
#' pooled(panel, ret ~ size + value + turnover, absorb = c("firm", "month"))
#' @export
pooled <- function(panel, formula, absorb = NULL, weights = NULL, errors = err_cluster("asset", "period"),
                   singletons = "drop") {
  check_panel(panel)
  check_errors(errors)
  check_choice(singletons, c("drop", "keep"), "singletons")
  design <- make_design(panel, formula, weights)
  fit <- if (is.null(absorb)) fit_pooled(panel, design, weights) else fit_absorbed(panel, design, absorb, weights, singletons == "drop")
  fit$call <- match.call()
  if (any(fit$core$aliased)) {
    lost <- fit$terms[fit$core$aliased]
    warn_class("sample", c(
      "{.val {lost}} {?is a combination/are combinations} of earlier terms{if (!is.null(absorb)) ' or of the absorbed effects'}: estimated as {.code NA}.",
      i = "{cli::qty(lost)}Remove {?it/them} from the formula, or reorder the terms to keep {?it/them} instead."
    ), term = lost)
  }
  restate(fit, errors)
}

fit_pooled <- function(panel, design, weights = NULL, call = rlang::caller_env()) {
  core <- row_result(
    cpp_pooled(design, panel$period, length(panel$periods), thread_count()), panel, weights, call
  )
  structure(
    list(
      kind = "pooled", terms = design$terms, estimate = stats::setNames(core$coef, design$terms),
      core = core, bread = expand_aliased(core$bread, core$aliased), sigma2 = core$sigma2,
      rank = core$rank, n_used = core$n_used, nobs = core$n_used, r_squared = core$r_squared,
      weights = weights, panel = panel, design = design, formula = design$formula
    ),
    class = c("lb_pooled", "lb_fit")
  )
}

# An r x r matrix of the kept terms as P x P, NA for the others.
expand_aliased <- function(kept, aliased) {
  if (!any(aliased)) {
    return(kept)
  }
  out <- matrix(NA_real_, length(aliased), length(aliased))
  out[!aliased, !aliased] <- kept
  out
}

# The regression on columns from which the effects are taken out.
fit_absorbed <- function(panel, design, absorb, weights, drop, call = rlang::caller_env()) {
  if (!is.character(absorb) || !length(absorb) || anyNA(absorb) || anyDuplicated(absorb)) {
    abort_input("{.arg absorb} must be names of columns, each once, such as {.code c(\"firm\", \"month\")}.", call = call)
  }
  if (!length(design$x)) {
    abort_input("With absorbed effects the formula needs a term of its own.", call = call)
  }
  codes <- lapply(absorb, effect_codes, panel = panel, call = call)
  found <- cpp_absorb(
    design, panel$period, length(panel$periods), lapply(codes, `[[`, "code"), vapply(codes, `[[`, 1, "n"), drop, thread_count()
  )
  found <- absorbed_result(found, design, absorb, panel, call)
  part <- function(column) list(list(x = found$columns, column = column - 1L, table = NULL))
  inner <- design
  inner$y <- part(1L)
  inner$x <- lapply(seq_along(design$x) + 1L, part)
  inner$intercept <- FALSE
  inner$terms <- setdiff(design$terms, "(Intercept)")
  fit <- fit_pooled(panel, inner, weights, call)
  fit$estimation <- inner
  fit$design <- design
  fit$effects <- list(
    names = absorb, codes = codes, levels = found$levels, rank = found$rank, exact = found$exact_rank,
    n_singletons = found$n_singletons, steps = found$steps, worst = found$worst
  )
  if (df.residual(fit) < 1) {
    abort_sample("No residual degree of freedom is left: {fit$n_used} rows, {fit$rank} terms, effects of rank {found$rank}.", call = call)
  }
  # Degrees of freedom of independent rows count the dummies.
  fit$sigma2 <- fit$sigma2 * (fit$n_used - fit$rank) / df.residual(fit)
  fit
}

# Codes of an effect: one column, or the pairs of several joined by a colon.
effect_codes <- function(name, panel, call) {
  parts <- if (name %in% c(names(panel$data), panel$key)) name else strsplit(name, ":", fixed = TRUE)[[1L]]
  codes <- lapply(parts, cluster_codes, panel = panel, call = call)
  if (length(codes) == 1L) {
    return(codes[[1L]])
  }
  columns <- lapply(codes, `[[`, "code")
  missing <- Reduce(`|`, lapply(columns, function(code) is.na(code) | code < 0L))
  group <- vctrs::vec_group_id(vctrs::new_data_frame(stats::setNames(columns, paste0("c", seq_along(columns)))))
  code <- as.integer(group) - 1L
  code[missing] <- -1L
  list(code = code, n = attr(group, "n"))
}

absorbed_result <- function(result, design, absorb, panel, call) {
  if (!inherits(result, "lb_core_error")) {
    return(result)
  }
  facts <- result$facts
  if (result$tag == "no_convergence") {
    column <- c(design$variables[1L], setdiff(design$terms, "(Intercept)"))[facts$column + 1L]
    abort_unsupported(c(
      "The effects of {.val {absorb}} could not be taken out of {.val {column}}: after {facts$steps} steps a group mean of {signif(facts$worst, 2)} of its spread is left.",
      i = "The groups hardly connect: absorb fewer effects, or drop groups that meet the others in a row or two."
    ), column = column, call = call)
  }
  if (result$tag == "cluster_id") {
    row <- facts$row
    abort_input(c(
      "An effect of {.val {absorb}} is missing in a row that would enter the estimate.",
      x = "The first is row {row}: {format_key(panel$assets[panel$asset[row] + 1L])} in {format_key(user_periods(panel$periods)[panel$period[row] + 1L])}."
    ), row = row, call = call)
  }
  core_result(result, call)
}

# The design that the numbers come from: with absorbed effects, columns without them.
estimation_design <- function(fit) if (is.null(fit$estimation)) fit$design else fit$estimation

# Factor from n - P to what n - P is for clusters in some ways: effects inside a cluster of any
# way are not counted, at least the constant is.
effects_factor <- function(fit, ways, call) {
  if (is.null(fit$effects)) {
    return(1)
  }
  used <- rows_used(fit)
  clusters <- lapply(ways, function(way) cluster_codes(way, fit$panel, call)$code[used])
  own <- lapply(fit$effects$codes, function(code) code$code[used])
  free <- !vapply(own, function(code) any(vapply(clusters, is_inside, NA, code = code)), NA)
  rank <- if (!any(free)) 1 else if (all(free)) fit$effects$rank else free_rank(own[free])
  (fit$n_used - fit$rank) / (fit$n_used - fit$rank - max(1, rank))
}

# Whether each value of `code` lies in one of `cluster`.
is_inside <- function(cluster, code) {
  vctrs::vec_unique_count(vctrs::new_data_frame(list(a = code, b = cluster))) == vctrs::vec_unique_count(code)
}

# An upper bound without the components: exact for one effect.
free_rank <- function(codes) {
  sum(vapply(codes, vctrs::vec_unique_count, 1L)) - (length(codes) - 1L)
}

refuse_crossing <- function(fit, way, errors, call) {
  if (is.null(fit$effects)) {
    return(invisible())
  }
  used <- rows_used(fit)
  cluster <- cluster_codes(way, fit$panel, call)$code[used]
  crossing <- !vapply(fit$effects$codes, function(code) is_inside(cluster, code$code[used]), NA)
  if (any(crossing)) {
    abort_unsupported(c(
      "{.val {format(errors)}} is exact only when absorbed effects lie inside the clusters; {.val {fit$effects$names[crossing]}} cross{cli::qty(sum(crossing))}{?es/} them.",
      i = "Put the effects that cross the clusters into the formula, as factors."
    ), call = call)
  }
}

absorbed_usage <- function(fit, counts) {
  used <- rows_used(fit)
  counts$n_used <- tabulate(fit$panel$period[used] + 1L, length(fit$panel$periods))
  counts$n_assets <- vctrs::vec_unique_count(fit$panel$asset[used])
  if (fit$effects$n_singletons > 0) {
    counts$left_out <- paste0(count_of(fit$effects$n_singletons, "row"), " alone in a group of an effect")
  }
  counts
}

absorbed_line <- function(fit) {
  effects <- fit$effects
  if (is.null(effects)) {
    return(NULL)
  }
  label_line("Absorbed", paste0(
    paste0(effects$names, " (", format_count(effects$levels), ")", collapse = ", "), "; rank ", format_count(effects$rank),
    if (!effects$exact) " at most", "; largest group mean left ", formatC(effects$worst, digits = 1, format = "e"),
    if (effects$steps > 0) paste0(" after ", count_of(effects$steps, "step"))
  ))
}
