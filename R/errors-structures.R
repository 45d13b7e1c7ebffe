#' Error structures: how the influence rows of an estimate are summed
#'
#' An error structure says which influence rows may be correlated. It is a plain description:
#' give it to an estimator (`errors =`), to [restate()], or several to [error_ladder()].
#'
#' | structure | applies to | allows |
#' | --- | --- | --- |
#' | `err_iid()` | averaged premia; pooled | independent periods; independent rows of equal variance |
#' | `err_hac()` | averaged premia | autocorrelation and heteroskedasticity over periods |
#' | `err_cosine()` | averaged premia | the same, with a t distribution that knows how few pieces of information there are |
#' | `err_groups()` | averaged premia | any dependence inside a few long runs of periods |
#' | `err_block()` | averaged premia | weak dependence, by resampling blocks of periods |
#' | `err_overlap()` | averaged premia | returns over several periods that overlap |
#' | `err_eiv()` | premia on estimated betas | as its `series`, and the error of the betas |
#' | `err_moments()` | premia on estimated betas | both passes stacked as moments, any autocorrelation of all of them |
#' | `err_misspec()` | premia on estimated betas | as robust `err_eiv()`, and a model that does not price the assets |
#' | `err_assets()` | bias-corrected betas of the whole sample | any distribution over assets, or clusters of them; periods independent |
#' | `err_hetero()` | pooled | independent rows of unequal variance |
#' | `err_cluster()` | pooled; averaged premia of characteristics | any correlation inside clusters, in any number of ways |
#' | `err_wild()` | pooled | few clusters, by resampling them |
#' | `err_common()` | pooled; averaged premia | shocks common to all assets that persist over periods |
#'
#' @param adjust Whether to multiply by T/(T-1), so that independent periods give the sample
#'   variance of the mean. Averages with unequal weights use the factor that is unbiased for
#'   them.
#' @param lags Number of lags, or how to choose it:
#'   * a number: lags count calendar periods, gaps included. `"bartlett"` and `"parzen"`
#'     divide by lags + 1, `"truncated"` gives lags 1 to `lags` full weight, `"qs"` divides by
#'     `lags` itself (any positive number) and weighs all lags;
#'   * `"rule"`: \eqn{\lfloor 4 (T/100)^{2/9} \rfloor}{floor(4 (T/100)^(2/9))};
#'   * `"root"`: \eqn{\lceil 1.3 \sqrt T \rceil - 1}{ceiling(1.3 sqrt(T)) - 1}, for fixed-b critical values;
#'   * `"newey_west"`: the plug-in of Newey and West (1994), not for `"truncated"`;
#'   * `"andrews"`: the AR(1) plug-in of Andrews (1991).
#'
#'   The plug-ins choose one bandwidth for all terms, with weight 1 on each premium and 0 on
#'   the constant.
#' @param kernel `"bartlett"` (Newey and West 1987), `"parzen"`, `"qs"` (quadratic spectral) or
#'   `"truncated"`. The first three give positive semidefinite covariances; the last may not,
#'   and then a warning says so.
#' @param critical `"t"`: p-values and intervals of the t distribution, which takes the
#'   long-run variance as known. `"fixed_b"`: for `"bartlett"` without prewhitening, the
#'   distribution that holds when the bandwidth is a fixed share of the sample (Kiefer and
#'   Vogelsang 2005), tabulated by simulation; wants more lags, such as `lags = "root"`.
#' @param terms Number of cosines B, or `"rule"`: \eqn{\lfloor 0.4\, T^{2/3} \rfloor}{floor(0.4 T^(2/3))}.
#' @param horizon Number of periods that each return spans: with monthly observations of yearly
#'   returns 12.
#' @param groups Number q of consecutive groups of periods, as equal in length as they can be.
#' @param reps Number of resamples for p-values and intervals.
#' @param block Mean length of a block in periods, or `"auto"` (Politis and White 2004): the longest
#'   that the terms ask for.
#' @param prewhiten Whether to fit a first-order vector autoregression first and to recolour
#'   (Andrews and Monahan 1992).
#' @param form `"shanken"`: the closed form of Shanken (1992), for errors that are independent
#'   of the factors, homoskedastic and serially uncorrelated. `series` then gives the factors'
#'   long-run covariance. It needs a balanced panel without `traits`. `"robust"`: the
#'   influence rows of the premia with the betas' own error in them, summed by `series`
#'   (Jagannathan and Wang 1998); valid under conditional heteroskedasticity, and on ragged
#'   panels.
#' @param series The sum over periods: `err_iid()`, `err_hac()` or `err_overlap()`; with rows (the form
#'   `"robust"`, `err_moments()`, `err_misspec()`) also `err_cosine()`, `err_groups()` or `err_block()`.
#' @param by Name of a column that puts assets into clusters (an industry), one value an
#'   asset, or `NULL`.
#' @param realised `TRUE`: errors for the premia realised in the sample, given the factors.
#'   `FALSE` (default): for the premia themselves; the sampling error of the factors' means
#'   under `series` is added to the factors' block, once.
#' @param type `"HC0"` (White 1980), `"HC1"` (times n/(n-P)), `"HC2"`, `"HC3"` (divided by one
#'   less the leverage, and by its square; MacKinnon and White 1985).
#' @param ... Names of the columns whose values are the clusters, as strings: one for each way.
#'   `"asset"` and `"period"` mean the panel's keys, whatever their columns are called.
#' @param few `NULL`, or what to do about few clusters, one way and pooled fits only: `"cr2"` (Bell and
#'   McCaffrey 2002, with degrees of freedom of its own for each term) or `"cr3"` (the cluster
#'   jackknife).
#' @param way Name of the column whose values are the clusters.
#' @param draws Weights of the clusters in a draw: `"rademacher"` (-1 and 1; all sign vectors, and
#'   exact, when there are no more of them than `reps`) or `"webb"` (six values, for fewer than about ten
#'   clusters).
#' @param null Whether residuals are those of the fit under the null, for each null anew (`TRUE`), or
#'   of the estimate.
#' @param small Small-sample factor of clustered errors with more than one way:
#'   * `"each"` (default): each term of the inclusion and exclusion has its own
#'     G/(G-1) (n-1)/(n-P);
#'   * `"min"`: all have that of the way with the fewest clusters;
#'   * `"none"`: no factor.
#'
#' @details
#' `err_moments()` is the sandwich of Hansen (1982) for both passes stacked as moments, with
#' the two-pass estimates as the choice of moments. Its covariance of premia and pricing
#' errors equals, for each kernel and lag, the sum over the influence rows, and is computed
#' that way; a bandwidth chosen from the data is chosen from those rows.
#'
#' `err_misspec()` adds to the rows of estimated betas what a wrong model and estimated weights
#' add (Kan, Robotti and Shanken 2013); the premium is then the value that fits best under the
#' weights of the second pass.
#'
#' `err_assets()` sums the score of each asset (or cluster of assets) of the corrected
#' regression, times G/(G-1): valid for any number of periods as assets grow in number (the
#' setting of Shanken 1992 and of Raponi, Robotti and Zaffaroni 2020; the sandwich in place of
#' their plug-in allows for unequal variances and fat tails).
#'
#' `err_cosine()` projects the rows on B slow cosines (Lazarus, Lewis, Stock and Watson 2018): t with B
#' degrees of freedom, joint tests of q restrictions against F with q and B - q + 1. `err_groups()` sums
#' rows inside q long runs of periods, times q/(q-1), t with q - 1 (Ibragimov and Mueller 2010);
#' a p-value above 0.083 is then not exact. `err_block()` has the exact variance of the stationary
#' bootstrap (Politis and Romano 1994), for which nothing is drawn; p-values and symmetric intervals
#' come from resampled t statistics, with R's random numbers. These three take periods as equally
#' spaced: a gap in the calendar is closed. `err_overlap()` gives horizon - 1 lags full weight (Hansen
#' and Hodrick 1980), by the calendar; a variance that is not positive becomes `NA`.
#'
#' `err_cluster()` works on averaged premia of characteristics too, through the rows that the
#' average has for each observation: a firm effect that lasts, which the usual errors of averaged
#' premia cannot see, is then allowed for. Each term is multiplied by G/(G-1), so that clusters of
#' periods give the errors of `err_iid()`.
#'
#' `err_common()` adds up the rows of each period and sums these by a kernel (Driscoll and Kraay
#' 1998): any correlation across assets, and one over time that dies out. It does not cover an effect
#' that stays with a firm. With `adjust` pooled fits are multiplied by T/(T-1) (n-1)/(n-P), so that zero
#' lags equal clusters of periods; for averaged premia it is the same as `err_hac()`.
#'
#' `err_cluster(few = )` and `err_wild()` are for some ten to fifty clusters, where errors clustered the
#' usual way are too small. Both work from cross-products of each cluster. CR2 has Satterthwaite
#' degrees of freedom under independent errors (Pustejovsky and Tipton 2018); joint tests take the
#' smallest. `err_wild()` is the wild cluster bootstrap (Cameron, Gelbach and Miller 2008): `tidy()` has
#' its p-values (symmetric, ties counted) and the limits of the interval of nulls that are not
#' rejected, found by bisection from the estimate outwards; the error shown is the clustered one. With five
#' clusters or fewer a 95 % interval is the whole line.
#'
#' Clusters in several ways follow Cameron, Gelbach and Miller (2011) and Thompson (2011). The
#' result need not be positive semidefinite: it is then repaired (negative eigenvalues of the
#' matrix scaled by heteroskedasticity-consistent errors become zero) with a warning, and a
#' coefficient whose own variance was not positive gets `NA`.
#'
#' @section Errors:
#' `lambdabar_error_input` for values that an argument cannot take. That a structure does not
#' apply to an estimate is found when the two meet (`lambdabar_error_unsupported`). A missing
#' cluster id on a row that entered the estimate is `lambdabar_error_input`; fewer than two
#' clusters are `lambdabar_error_sample`.
#'
#' @return An object of class `lb_errors`.
#'
#' @references
#' Andrews (1991), Econometrica 59, 817-858. Bell and McCaffrey (2002), Survey Methodology 28, 169-181.
#' Cameron, Gelbach and Miller (2008), Review of Economics and Statistics 90, 414-427. Pustejovsky and
#' Tipton (2018), Journal of Business & Economic Statistics 36, 672-683. Roodman, Nielsen, MacKinnon and
#' Webb (2019), Stata Journal 19, 4-60. Andrews and Monahan (1992), Econometrica 60,
#' 953-966. Driscoll and Kraay (1998), Review of Economics and Statistics 80, 549-560. Cameron, Gelbach and Miller (2011), Journal of Business & Economic Statistics 29,
#' 238-249. Hansen (1982), Econometrica 50, 1029-1054. Hansen and Hodrick (1980), Journal of Political
#' Economy 88, 829-853. Ibragimov and Mueller (2010), Journal of Business & Economic Statistics 28,
#' 453-468. Jagannathan and Wang (1998), Journal of
#' Finance 53, 1285-1309. Kan, Robotti and Shanken (2013), Journal of Finance 68, 2617-2649.
#' Kiefer and Vogelsang (2005), Econometric Theory 21, 1130-1164. Lazarus, Lewis, Stock and Watson
#' (2018), Journal of Business & Economic Statistics 36, 541-559.
#' MacKinnon and White (1985), Journal of Econometrics 29, 305-325. Newey and West (1987),
#' Econometrica 55, 703-708; (1994), Review of Economic Studies 61, 631-653. Politis and Romano (1994),
#' Journal of the American Statistical Association 89, 1303-1313. Politis and White (2004), Econometric
#' Reviews 23, 53-70, corrected by Patton, Politis and White (2009), 28, 372-375. Raponi, Robotti and
#' Zaffaroni (2020), Review of Financial Studies 33, 2796-2842. Shanken (1992), Review of Financial Studies 5, 1-33. Thompson (2011), Journal of
#' Financial Economics 99, 1-10. White (1980), Econometrica 48, 817-838.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 60), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value, errors = err_hac(lags = 4))
#' restate(fit, err_hac(lags = "andrews", kernel = "qs"))
#'
#' rival <- pooled(panel, ret ~ size + value, errors = err_cluster("asset", "period"))
#' restate(rival, err_hetero("HC3"))
#' @name error_structures
NULL

new_errors <- function(class, ...) structure(list(...), class = c(class, "lb_errors"))

check_flag <- function(value, arg, call = rlang::caller_env()) {
  if (!is.logical(value) || length(value) != 1L || is.na(value)) {
    abort_input("{.arg {arg}} must be {.code TRUE} or {.code FALSE}.", call = call)
  }
  value
}

#' @rdname error_structures
#' @export
err_iid <- function(adjust = TRUE) {
  new_errors("lb_err_iid", adjust = check_flag(adjust, "adjust"))
}

#' @rdname error_structures
#' @export
err_hac <- function(lags = "rule", kernel = "bartlett", prewhiten = FALSE, adjust = TRUE, critical = "t") {
  critical <- check_choice(critical, c("t", "fixed_b"), "critical")
  check_flag(prewhiten, "prewhiten")
  if (critical == "fixed_b" && (!identical(kernel, "bartlett") || prewhiten)) {
    abort_input("Fixed-b critical values are for the {.val bartlett} kernel without prewhitening.")
  }
  kernel <- check_choice(kernel, c("bartlett", "parzen", "qs", "truncated"), "kernel")
  if (is.numeric(lags)) {
    if (length(lags) != 1L || !is.finite(lags) || lags < 0) {
      abort_input("{.arg lags} must be one number, 0 or more.")
    }
    if (kernel != "qs" && lags != floor(lags)) {
      abort_input("{.arg lags} must be a whole number for the {.val {kernel}} kernel.")
    }
  } else {
    check_choice(lags, c("rule", "root", "newey_west", "andrews"), "lags")
    if (kernel == "truncated" && lags == "newey_west") {
      abort_input("The Newey-West (1994) rule has no constant for the truncated kernel: give {.arg lags} as a number, or {.val andrews}.")
    }
  }
  new_errors(
    "lb_err_hac",
    lags = lags, kernel = kernel, prewhiten = prewhiten, adjust = check_flag(adjust, "adjust"), critical = critical
  )
}

#' @rdname error_structures
#' @export
err_cosine <- function(terms = "rule") {
  if (!identical(terms, "rule")) check_whole(terms, "terms", 1, 1e6)
  new_errors("lb_err_cosine", terms = terms)
}

#' @rdname error_structures
#' @export
err_overlap <- function(horizon, adjust = TRUE) {
  check_whole(horizon, "horizon", 1, 1e6)
  # A truncated kernel in all but its name.
  new_errors(
    c("lb_err_overlap", "lb_err_hac"),
    lags = horizon - 1, kernel = "truncated", prewhiten = FALSE, adjust = check_flag(adjust, "adjust"), critical = "t"
  )
}

#' @rdname error_structures
#' @export
err_groups <- function(groups = 10) {
  check_whole(groups, "groups", 2, 1e6)
  new_errors("lb_err_groups", groups = groups)
}

#' @rdname error_structures
#' @export
err_block <- function(reps = 999, block = "auto") {
  check_whole(reps, "reps", 19, 1e7)
  if (!identical(block, "auto") && !(is.numeric(block) && length(block) == 1L && is.finite(block) && block >= 1)) {
    abort_input("{.arg block} must be one number of periods, 1 or more, or {.val auto}.")
  }
  new_errors("lb_err_block", reps = reps, block = block)
}

#' @rdname error_structures
#' @export
err_eiv <- function(form = "shanken", series = err_iid()) {
  new_errors(
    "lb_err_eiv",
    form = check_choice(form, c("shanken", "robust"), "form"), series = check_series(series, resummed = form == "robust")
  )
}

#' @rdname error_structures
#' @export
err_moments <- function(series = err_hac()) {
  new_errors("lb_err_moments", series = check_series(series, resummed = TRUE))
}

#' @rdname error_structures
#' @export
err_misspec <- function(series = err_iid()) {
  new_errors("lb_err_misspec", series = check_series(series, resummed = TRUE))
}

#' @rdname error_structures
#' @export
err_assets <- function(by = NULL, series = err_iid(), realised = FALSE) {
  if (!is.null(by) && (!is.character(by) || length(by) != 1L || is.na(by))) {
    abort_input("{.arg by} must be the name of one column, as a string, or {.code NULL}.")
  }
  new_errors("lb_err_assets", by = by, series = check_series(series), realised = check_flag(realised, "realised"))
}

#' @rdname error_structures
#' @export
err_hetero <- function(type = "HC1") {
  new_errors("lb_err_hetero", type = check_choice(type, paste0("HC", 0:3), "type"))
}

#' @rdname error_structures
#' @export
err_cluster <- function(..., small = "each", few = NULL) {
  ways <- list(...)
  named <- vapply(ways, function(way) is.character(way) && length(way) == 1L && !is.na(way), NA)
  if (!length(ways) || !all(named) || !is.null(names(ways)) && any(nzchar(names(ways)))) {
    abort_input(c(
      "{.fn err_cluster} takes names of columns as strings, one for each way.",
      i = "For example {.code err_cluster(\"asset\", \"period\")}."
    ))
  }
  ways <- unlist(ways)
  if (anyDuplicated(ways)) {
    abort_input("{.fn err_cluster} names {.val {unique(ways[duplicated(ways)])}} twice.")
  }
  new_errors(
    "lb_err_cluster",
    ways = ways, small = check_choice(small, c("each", "min", "none"), "small"), few = check_few(few, ways)
  )
}

check_few <- function(few, ways, call = rlang::caller_env()) {
  if (is.null(few)) {
    return(NULL)
  }
  check_choice(few, c("cr2", "cr3"), "few", call)
  if (length(ways) > 1L) {
    abort_input("Corrections for few clusters exist for one way; {.arg few} comes with {length(ways)}.", call = call)
  }
  few
}

#' @rdname error_structures
#' @export
err_wild <- function(way, reps = 9999, draws = "rademacher", null = TRUE) {
  if (!is.character(way) || length(way) != 1L || is.na(way)) {
    abort_input("{.arg way} must be the name of one column, as a string.")
  }
  check_whole(reps, "reps", 99, 1e7)
  new_errors(
    "lb_err_wild", way = way, reps = reps, draws = check_choice(draws, c("rademacher", "webb"), "draws"),
    null = check_flag(null, "null")
  )
}

#' @rdname error_structures
#' @export
err_common <- function(lags = "rule", kernel = "bartlett", adjust = TRUE) {
  series <- err_hac(lags, kernel, adjust = adjust)
  class(series) <- c("lb_err_common", "lb_errors")
  series
}

# `resummed`: whether sums that are no kernel of lags will do.
check_series <- function(series, resummed = FALSE, call = rlang::caller_env()) {
  if (!resummed && identical(series$critical, "fixed_b")) {
    abort_input("Fixed-b critical values are for t-statistics of premia: here give {.arg series} without {.arg critical}.", call = call)
  }
  if (inherits(series, c("lb_err_iid", "lb_err_hac")) || resummed && is_resummed(series)) {
    return(series)
  }
  if (resummed) {
    abort_input("{.arg series} must be a sum over periods: {.fn err_iid}, {.fn err_hac}, {.fn err_overlap}, {.fn err_cosine}, {.fn err_groups} or {.fn err_block}.", call = call)
  }
  abort_input("{.arg series} must be {.fn err_iid}, {.fn err_hac} or {.fn err_overlap}.", call = call)
}

is_resummed <- function(series) inherits(series, c("lb_err_cosine", "lb_err_groups", "lb_err_block"))

check_errors <- function(errors, call = rlang::caller_env()) {
  if (!inherits(errors, "lb_errors")) {
    abort_input(
      "{.arg errors} must be an error structure such as {.fn err_hac}, not {.obj_type_friendly {errors}}.",
      call = call
    )
  }
  errors
}

# A short name of a structure, for tables.
#' @export
format.lb_errors <- function(x, ...) {
  lags <- function(x) if (is.numeric(x$lags)) count_of(x$lags, "lag") else lag_rule_name(x$lags)
  switch(class(x)[1L],
    lb_err_iid = "independent",
    lb_err_hac = paste0(kernel_name(x$kernel), ", ", lags(x), if (x$prewhiten) ", prewhitened", if (x$critical == "fixed_b") ", fixed-b"),
    lb_err_overlap = paste0("overlap of ", count_of(x$lags + 1, "period")),
    lb_err_cosine = paste0("cosines", if (x$terms != "rule") paste0(", ", x$terms)),
    lb_err_groups = paste0(x$groups, " groups of periods"),
    lb_err_block = paste0("resampled blocks", if (x$block != "auto") paste0(" of ", format(x$block))),
    lb_err_eiv = paste0(if (x$form == "shanken") "Shanken" else "estimated betas", ", ", format(x$series)),
    lb_err_misspec = paste0("misspecified model, ", format(x$series)),
    lb_err_moments = paste0("stacked moments, ", format(x$series)),
    lb_err_assets = paste0("summed over assets", if (!is.null(x$by)) paste0(" by ", x$by), if (x$realised) ", realised premia" else if (inherits(x$series, "lb_err_hac")) paste0(", factors ", format(x$series))),
    lb_err_common = paste0("common shocks, ", kernel_name(x$kernel), ", ", lags(x)),
    lb_err_hetero = paste0("heteroskedastic, ", x$type),
    lb_err_wild = paste0("wild clusters of ", x$way, if (x$draws == "webb") ", Webb", if (!x$null) ", unrestricted"),
    lb_err_cluster = paste0("clustered by ", first_few(x$ways), if (!is.null(x$few)) paste0(", ", toupper(x$few)))
  )
}

#' @export
print.lb_errors <- function(x, ...) {
  cat_lines(paste0("Error structure: ", format(x)))
  invisible(x)
}

lag_rule_name <- function(rule) {
  c(rule = "rule of thumb", root = "root rule", newey_west = "Newey-West 1994", andrews = "Andrews 1991")[[rule]]
}

kernel_name <- function(kernel) {
  c(bartlett = "Bartlett", parzen = "Parzen", qs = "quadratic spectral", truncated = "truncated")[[kernel]]
}
