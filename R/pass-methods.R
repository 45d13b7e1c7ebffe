#' What general covariance packages ask of a pooled fit
#'
#' With these, functions such as those of package sandwich give on a pooled fit what they give
#' on the same regression by [stats::lm()]. They make a matrix of all rows: for panels of a size
#' that can afford it. The package's own errors never do.
#'
#' @param object From [pooled()]; for `predict()` also from [price_traits()].
#' @param newdata A data frame with the variables of the formula's right side, or missing for the
#'   rows of the panel.
#' @param ... Not used.
#'
#' @return
#' * `model.matrix()`: rows that entered the estimate x terms that have an estimate (columns less
#'   the effects, when some are absorbed).
#' * `estfun()`: the same, times residual and weight; `bread()`: n (X'WX)^-1; `hatvalues()`: the
#'   leverages (not with absorbed effects); `df.residual()`: n - P.
#' * `predict()`: for each row, `NA` where a variable is missing. Also for averaged premia of
#'   characteristics. With absorbed effects only for the panel's own rows.
#'
#' @section Errors: `lambdabar_error_unsupported` where an absorbed effect stands in the way.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 40, months = 24), "firm", "month")
#' fit <- pooled(panel, ret ~ size + value)
#' dim(model.matrix(fit))
#' if (requireNamespace("sandwich", quietly = TRUE)) sandwich::vcovHC(fit, "HC3")
#' predict(fit, data.frame(size = 5, value = 0.2))
#' @name pooled_methods
NULL

#' @rdname pooled_methods
#' @importFrom stats model.matrix
#' @export
model.matrix.lb_pooled <- function(object, ...) {
  design <- estimation_design(object)
  used <- which(rows_used(object))
  X <- vapply(design$x, column_values, numeric(length(used)), rows = used)
  X <- matrix(X, length(used))
  if (design$intercept) X <- cbind(1, X)
  X <- X[, !object$core$aliased, drop = FALSE]
  dimnames(X) <- list(used, object$terms[!object$core$aliased])
  X
}

# A design column at some rows: the product of its parts, codes looked up in their tables.
column_values <- function(column, rows) {
  out <- rep(1, length(rows))
  for (part in column) {
    x <- if (is.matrix(part$x)) part$x[rows, part$column + 1L] else part$x[rows]
    out <- out * (if (is.null(part$table)) as.numeric(x) else part$table[x])
  }
  out
}

used_weights <- function(object, rows) {
  weight <- estimation_design(object)$weight
  if (is.null(weight)) rep(1, length(rows)) else column_values(weight, rows)
}

#' @exportS3Method sandwich::estfun
estfun.lb_pooled <- function(x, ...) {
  used <- which(rows_used(x))
  model.matrix(x) * (unname(residuals(x))[used] * used_weights(x, used))
}

#' @exportS3Method sandwich::bread
bread.lb_pooled <- function(x, ...) {
  kept <- !x$core$aliased
  `dimnames<-`(x$n_used * x$core$bread, rep(list(x$terms[kept]), 2L))
}

#' @rdname pooled_methods
#' @importFrom stats hatvalues
#' @param model From [pooled()].
#' @export
hatvalues.lb_pooled <- function(model, ...) {
  if (!is.null(model$effects)) {
    abort_unsupported("Leverages need the share of the absorbed effects, which is not known: put them into the formula.")
  }
  X <- model.matrix(model)
  rowSums((X %*% model$core$bread) * X) * used_weights(model, as.integer(rownames(X)))
}

#' @rdname pooled_methods
#' @importFrom stats df.residual
#' @export
df.residual.lb_pooled <- function(object, ...) {
  object$n_used - object$rank - (if (is.null(object$effects)) 0 else object$effects$rank)
}

#' @rdname pooled_methods
#' @importFrom stats predict
#' @export
predict.lb_fit <- function(object, newdata, ...) {
  if (missing(newdata)) {
    return(fitted(object))
  }
  if (!is.null(object$effects)) {
    abort_unsupported("With absorbed effects only the panel's own rows can be predicted: leave {.arg newdata} out.")
  }
  if (!inherits(object, "lb_pooled") && object$kind != "traits") {
    abort_unsupported("New rows can be predicted from observed characteristics, not from betas.")
  }
  terms <- stats::delete.response(stats::terms(object$formula))
  data <- as.data.frame(object$panel$data)
  levels <- stats::.getXlevels(terms, stats::model.frame(terms, data, na.action = stats::na.pass))
  frame <- tryCatch(
    stats::model.frame(terms, newdata, na.action = stats::na.pass, xlev = levels),
    error = function(e) abort_input("{.arg newdata} does not fit the formula: {conditionMessage(e)}.", call = rlang::caller_env(4))
  )
  X <- stats::model.matrix(terms, frame)
  estimate <- object$estimate
  kept <- is.finite(estimate)
  as.numeric(X[, names(estimate)[kept], drop = FALSE] %*% estimate[kept])
}
