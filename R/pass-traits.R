#' Premia on observed characteristics: one cross-section a period, then the average
#'
#' Regresses the left side on the characteristics within each period, over the assets present
#' in it, and averages the slopes over the periods (Fama and MacBeth 1973).
#'
#' @param panel From [asset_panel()], n rows.
#' @param formula Two-sided, such as `ret ~ size + log(mcap) + industry`. Transformations,
#'   interactions, matrices such as `poly(size, 2)`, and factor, text or logical variables
#'   (as their contrasts) are understood; variables are columns of the panel, then objects
#'   where the formula was written. `0 +` leaves the constant out. Characteristics must be
#'   known before the period begins; the verb cannot check that.
#' @param weights Name of a numeric column of weights for weighted least squares within each
#'   period, or `NULL`. Only their ratios inside a period matter. Rows of weight zero do not
#'   enter; a negative weight is an error.
#' @param min_assets Fewest complete rows that a period needs, at least P + 1 (the default).
#' @param average How the periods are weighed:
#'   * `"equal"` (default): each period counts once;
#'   * `"assets"`: by the number of assets used;
#'   * `"precision"`: each slope by one over its squared standard error within the period.
#' @param errors An [error structure][error_structures] for averages: [err_iid()] or
#'   [err_hac()].
#'
#' @return An object of class `lb_premia`. Among its methods: `tidy()` (premia, errors,
#'   intervals), `glance()`, `augment()` (the rows with fitted values and residuals at the
#'   averaged premia), `coef()`, `vcov()`, `confint()`, `nobs()`, [period_premia()],
#'   [sample_used()], [influence_rows()], [restate()], [error_ladder()], [term_test()].
#'
#' @section Periods:
#' Each period has a status: `estimated`; `too_few_assets`; `no_variation` (a term has one
#' value inside that period); `rank_deficient` (a term is a combination of earlier ones, an
#' industry without firms, say); `empty` (no complete row). Only estimated periods enter the
#' average; the others are counted in [sample_used()] and in what is printed, with their
#' reason, and a warning is given when they are more than a tenth.
#'
#' @section Numbers:
#' Slopes come from centred cross-products of each period, made in one pass over the columns
#' where they lie. A period whose scaled cross-products are close to singular is solved again
#' from its rows by QR with column pivoting. Standard errors within a period, as used by
#' `average = "precision"` and shown in [period_premia()], are those of ordinary (weighted)
#' least squares.
#'
#' @section Errors:
#' * `lambdabar_error_no_variation`: a term never varies inside any period: no cross-section
#'   can say anything about it (field `term`). [pooled()] can use variation over time.
#' * `lambdabar_error_rank`: every usable period is rank deficient.
#' * `lambdabar_error_sample`: fewer than two periods could be estimated.
#' * `lambdabar_error_input`: formula, weights or arguments.
#' * `lambdabar_error_unsupported`: the error structure is for another kind of estimate.
#'
#' @references Fama and MacBeth (1973), Journal of Political Economy 81, 607-636.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 80, months = 60), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value + turnover, errors = err_hac(lags = 3))
#' fit
#' generics::tidy(fit)
#'
#' # Weighted by market value, with industries
#' price_traits(panel, ret ~ value + industry, weights = "mcap", average = "assets")
#' @export
price_traits <- function(panel, formula, weights = NULL, min_assets = NULL, average = "equal",
                         errors = err_hac()) {
  check_panel(panel)
  check_errors(errors)
  average <- check_choice(average, c("equal", "assets", "precision"), "average")
  if (!is.null(min_assets)) check_whole(min_assets, "min_assets", 1, .Machine$integer.max)
  design <- make_design(panel, formula, weights)
  T <- length(panel$periods)
  sections <- row_result(
    cpp_cross_sections(design, panel$period, T, if (is.null(min_assets)) 0 else min_assets, thread_count()),
    panel, weights
  )
  refuse_no_variation(design, sections)
  used <- which(sections$status == "estimated")
  refuse_too_few_periods(design, sections, panel)

  averaged <- core_result(cpp_average_premia(
    t(sections$coef[, used, drop = FALSE]), t(sections$std_error[, used, drop = FALSE]),
    sections$n_used[used], average
  ))
  fit <- new_premia(
    kind = "traits", call = match.call(), formula = formula, terms = design$terms,
    averaged = averaged, sections = sections, used = used, panel = panel, design = design,
    weights = weights, average = average, min_assets = min_assets
  )
  fit$slot <- panel$slot[used]
  fit$nobs <- sum(sections$n_used[used])
  fit$r_squared <- mean(sections$r_squared[used])
  warn_lost_periods(fit)
  restate(fit, errors)
}

# What both kinds of averaged premia have in common. Bandwidths are chosen with weight 1 on
# premia and 0 on the constant (see err_hac()).
new_premia <- function(kind, terms, averaged, ...) {
  weights <- as.numeric(terms != "(Intercept)")
  if (!any(weights > 0)) weights[] <- 1
  rows <- averaged$rows
  colnames(rows) <- terms
  structure(
    list(
      kind = kind, terms = terms, estimate = stats::setNames(averaged$estimate, terms),
      rows = rows, small_sample = averaged$small_sample, bandwidth_weights = weights, ...
    ),
    class = c("lb_premia", "lb_fit")
  )
}

refuse_no_variation <- function(design, sections, call = rlang::caller_env()) {
  stuck <- design$terms[!sections$varies]
  if (!length(stuck)) {
    return(invisible())
  }
  abort_no_variation(
    c(
      "{cli::qty(stuck)}Term{?s} {.val {stuck}} never var{?ies/y} inside any period: no cross-section can learn from {?it/them}.",
      i = "{cli::qty(stuck)}If {?it varies/they vary} over time, use {.fn pooled}; if {?it is a factor/they are factors}, use {.fn price_factors}."
    ),
    term = stuck, call = call
  )
}

refuse_too_few_periods <- function(design, sections, panel, call = rlang::caller_env()) {
  used <- sum(sections$status == "estimated")
  if (used >= 2L) {
    return(invisible())
  }
  counts <- table(sections$status)
  what <- paste0(counts, " ", gsub("_", " ", names(counts)))
  if (counts[1L] == length(sections$status) && names(counts) == "rank_deficient") {
    terms <- unique(design$terms[sections$culprit])
    abort_rank(
      c(
        "The characteristics are collinear in every period.",
        x = "{.val {terms}} {?is a combination/are combinations} of earlier terms.",
        i = "{cli::qty(terms)}Remove {?it/them} from the formula."
      ),
      term = terms, call = call
    )
  }
  abort_sample(
    c(
      "An average needs two estimated periods or more; here {used} of {length(sections$status)} could be estimated.",
      x = "Periods: {first_few(what)}.",
      i = "See {.fn panel_health}; one cross-section alone is {.fn pooled} on a one-period panel."
    ),
    count = used, call = call
  )
}

warn_lost_periods <- function(fit) {
  status <- fit$sections$status
  lost <- sum(status != "estimated")
  if (lost <= 0.1 * length(status)) {
    return(invisible())
  }
  counts <- table(status[status != "estimated"])
  what <- paste0(counts, " ", gsub("_", " ", names(counts)))
  culprits <- fit$sections$culprit[status %in% c("rank_deficient", "no_variation")]
  terms <- unique(fit$terms[culprits])
  warn_class("sample", c(
    "{lost} of {length(status)} periods could not be estimated: {first_few(what)}.",
    i = if (length(terms)) "The terms behind it: {.val {terms}}.",
    i = "{.fn sample_used} lists them period by period."
  ), count = lost)
}
