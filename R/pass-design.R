# From a formula to columns that the core reads in place.
#
# A design column is a list of parts whose product it is; a part is list(x, column, table):
# a vector (or the 0-based column of a matrix), and for coded variables the value of each
# code. Nothing of size n x P is made: a dummy is its factor's codes and a table. Names and
# columns are those of stats::model.matrix(), which the tests hold it to.

make_design <- function(panel, formula, weights = NULL, call = rlang::caller_env()) {
  if (!inherits(formula, "formula") || length(formula) != 3L) {
    abort_input("{.arg formula} must be two-sided, like {.code ret ~ size + value}.", call = call)
  }
  terms <- design_terms(formula, panel, call)
  variables <- design_variables(terms, panel, call)
  y <- variables[[1L]]
  if (y$kind != "real" || length(y$columns) != 1L) {
    abort_input("The left side of the formula, {.code {y$label}}, must be one numeric variable.", column = y$label, call = call)
  }
  x <- term_columns(terms, variables)
  list(
    y = list(y$columns[[1L]]),
    x = x$columns,
    weight = if (!is.null(weights)) list(weight_part(panel, weights, call)),
    intercept = attr(terms, "intercept") == 1L,
    terms = c(if (attr(terms, "intercept") == 1L) "(Intercept)", x$names),
    variables = c(y$label, x$labels, weights),
    formula = formula
  )
}

design_terms <- function(formula, panel, call) {
  if ("." %in% all.vars(formula)) {
    abort_input(c(
      "The formula uses {.code .}, which would bring in the keys too.",
      i = "Name the terms."
    ), call = call)
  }
  terms <- stats::terms(formula)
  if (length(attr(terms, "offset"))) {
    abort_input("Offsets are not supported: subtract them on the left side of the formula.", call = call)
  }
  terms
}

# Each variable of the formula, evaluated once, in the panel's data and then where the
# formula was written.
design_variables <- function(terms, panel, call) {
  expressions <- as.list(attr(terms, "variables"))[-1L]
  lapply(expressions, function(expression) {
    label <- paste(deparse(expression, 500L), collapse = " ")
    value <- tryCatch(
      eval(expression, panel$data, environment(terms)),
      error = function(e) {
        known <- names(panel$data)
        unknown <- setdiff(all.vars(expression), known)
        near <- unlist(lapply(unknown, agrep, known, max.distance = 0.3, value = TRUE))
        abort_input(
          c(
            "Cannot evaluate {.code {label}} of the formula: {conditionMessage(e)}.",
            i = if (length(near)) "Did you mean {.or {.val {near}}}?"
          ),
          column = label, call = call
        )
      }
    )
    design_variable(value, label, nrow(panel$data), call)
  })
}

design_variable <- function(value, label, n, call) {
  rows <- if (is.null(dim(value))) length(value) else nrow(value)
  if (is.data.frame(value) || is.list(value) || inherits(value, "integer64") || !is.atomic(value)) {
    abort_input(
      c(
        "{.code {label}} is of type {.cls {class(value)[1L]}}, which a regression cannot use.",
        i = "Convert it to numbers, text or a factor first."
      ),
      column = label, call = call
    )
  }
  if (rows != n) {
    abort_input(
      "{.code {label}} has {rows} value{?s}, but the panel has {n} rows.",
      column = label, call = call
    )
  }
  if (is.factor(value) || is.character(value) || is.logical(value)) {
    return(coded_variable(value, label, call))
  }
  if (inherits(value, c("Date", "POSIXct"))) value <- unclass(value)
  if (!is.numeric(value)) {
    abort_input("{.code {label}} of type {.cls {class(value)[1L]}} is not numeric.", column = label, call = call)
  }
  n_columns <- if (is.null(dim(value))) 1L else ncol(value)
  suffix <- if (is.null(dim(value))) "" else if (is.null(colnames(value))) seq_len(n_columns) else colnames(value)
  list(
    kind = "real", label = label, names = paste0(label, suffix),
    columns = lapply(seq_len(n_columns), function(j) list(x = value, column = j - 1L, table = NULL))
  )
}

# A factor, text or logical variable: codes and its contrasts.
coded_variable <- function(value, label, call) {
  if (is.logical(value)) {
    levels <- c("FALSE", "TRUE")
    code <- value + 1L
  } else if (is.factor(value)) {
    used <- tabulate(value, nlevels(value)) > 0L
    levels <- levels(value)[used]
    code <- if (all(used)) value else factor(value, levels = levels)
    own_contrasts <- if (all(used)) attr(value, "contrasts")
    attr(code, "contrasts") <- own_contrasts
  } else {
    encoded <- encode_key(value, label, "group", call)
    levels <- encoded$values
    code <- encoded$code + 1L
    code[encoded$code < 0L] <- NA_integer_
  }
  if (length(levels) < 2L) {
    abort_input(
      "{.code {label}} has only one level, {.val {levels}}: nothing to compare.",
      column = label, call = call
    )
  }
  shown <- factor(levels, levels = levels)
  if (is.ordered(value)) shown <- as.ordered(shown)
  if (!is.null(attr(code, "contrasts"))) stats::contrasts(shown) <- attr(code, "contrasts")
  coding <- stats::contrasts(shown)
  suffix <- if (is.null(colnames(coding))) seq_len(ncol(coding)) else colnames(coding)
  whole <- diag(length(levels))
  part <- function(table) {
    lapply(seq_len(ncol(table)), function(j) list(x = code, column = 0L, table = as.double(table[, j])))
  }
  list(
    kind = "coded", label = label,
    names = paste0(label, suffix), columns = part(coding),
    full_names = paste0(label, levels), full_columns = part(whole)
  )
}

# The columns of each term, first variable fastest, as R's own model matrices order them.
term_columns <- function(terms, variables) {
  factors <- full_coding(attr(terms, "factors"), attr(terms, "intercept"), variables)
  labels <- attr(terms, "term.labels")
  columns <- list()
  names <- character()
  from <- character()
  for (label in labels) {
    involved <- which(factors[, label] > 0L)
    term <- list(columns = list(list()), names = "")
    for (v in involved) {
      variable <- variables[[v]]
      full <- factors[v, label] == 2L && variable$kind == "coded"
      own <- if (full) variable$full_columns else variable$columns
      own_names <- if (full) variable$full_names else variable$names
      term <- cross_columns(term, own, own_names)
    }
    columns <- c(columns, term$columns)
    names <- c(names, term$names)
    from <- c(from, rep(label, length(term$columns)))
  }
  list(columns = columns, names = names, labels = from)
}

# Without a constant the first coded variable gets a column for every level, as in R's own
# model matrices.
full_coding <- function(factors, intercept, variables) {
  coded <- vapply(variables, function(variable) variable$kind == "coded", NA)
  if (intercept == 0L && any(coded)) {
    for (j in seq_len(ncol(factors))) {
      first <- which(factors[, j] > 0L & coded)
      if (length(first)) {
        factors[first[1L], j] <- 2L
        break
      }
    }
  }
  factors
}

cross_columns <- function(term, columns, names) {
  out <- list(columns = list(), names = character())
  for (j in seq_along(columns)) {
    for (k in seq_along(term$columns)) {
      out$columns <- c(out$columns, list(c(term$columns[[k]], list(columns[[j]]))))
      left <- term$names[k]
      out$names <- c(out$names, if (nzchar(left)) paste0(left, ":", names[j]) else names[j])
    }
  }
  out
}

# What the core says of single rows, with their names in the panel.
row_result <- function(result, panel, weights = NULL, call = rlang::caller_env()) {
  row <- if (inherits(result, "lb_core_error")) result$facts$row
  if (is.null(row)) {
    return(core_result(result, call, list(
      too_few_rows = "{.fn panel_health} shows which column is missing where."
    )))
  }
  asset <- panel$assets[panel$asset[row] + 1L]
  period <- user_periods(panel$periods)[panel$period[row] + 1L]
  where <- paste0("row ", row, ", ", format_key(asset), " in ", format_key(period))
  message <- if (result$tag == "leverage") {
    c(
      "One row alone determines a coefficient: {where}.",
      i = "Its HC2 and HC3 errors do not exist: use {.val HC1}, or drop the term."
    )
  } else {
    c(
      "The weight {.val {weights}} is negative: {where}, is the first such row.",
      i = "Weights must be zero (the row does not enter) or positive."
    )
  }
  abort_input(message, column = weights, row = row, asset = asset, period = period, call = call)
}

weight_part <- function(panel, weights, call) {
  check_column(panel$data, weights, "weights", call)
  value <- panel$data[[weights]]
  if (!is_plain_number(value)) {
    abort_input("The weights {.val {weights}} must be numeric.", column = weights, call = call)
  }
  list(x = value, column = 0L, table = NULL)
}
