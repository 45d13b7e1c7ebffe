# Values of each design column, through the core's own reader.
design_matrix <- function(panel, formula) {
  design <- make_design(panel, formula)
  columns <- lapply(design$x, function(column) {
    one <- design
    one$y <- column
    cpp_response(one, panel$period, length(panel$periods))
  })
  out <- do.call(cbind, columns)
  if (design$intercept) out <- cbind(rep(1, nobs(panel)), out)
  colnames(out) <- design$terms
  out
}

test_that("columns and names are those of R's own model matrices", {
  rows <- small_rows()
  rows$group <- rep(c("b", "a"), length.out = nrow(rows))
  rows$flag <- rows$size > 5
  rows$count <- as.integer(round(10 * rows$value))
  rows$rank <- factor(rep(1:4, length.out = nrow(rows)), ordered = TRUE)
  panel <- small_panel(rows)
  offset_of_three <- 3
  formulas <- list(
    ret ~ size, ret ~ 0 + size, ret ~ log(size) + I(value^2), ret ~ size * value, ret ~ industry,
    ret ~ 0 + industry, ret ~ industry:size, ret ~ industry * size, ret ~ group * industry, ret ~ flag,
    ret ~ count, ret ~ poly(size, 2), ret ~ rank, ret ~ 0 + group:industry, ret ~ size:value:industry,
    ret ~ I(size - offset_of_three), ret ~ size + value - 1, I(ret * 100) ~ size, ret ~ 1
  )
  for (formula in formulas) {
    expected <- stats::model.matrix(formula, rows)
    expect_equal(
      design_matrix(panel, formula), matrix(expected, nrow(expected), dimnames = list(NULL, colnames(expected))),
      tolerance = 1e-15, info = deparse1(formula)
    )
  }
})

test_that("contrasts and options for them are honoured, unused levels are not", {
  rows <- small_rows()
  rows$industry <- factor(rows$industry, levels = c("ghost", "salt", "glass", "nets"))
  rows$sum <- droplevels(rows$industry)
  contrasts(rows$sum) <- contr.sum(3)
  panel <- small_panel(rows)
  expect_identical(colnames(design_matrix(panel, ret ~ industry)), c("(Intercept)", "industryglass", "industrynets"))
  expected <- stats::model.matrix(ret ~ sum, rows)
  expect_equal(unname(design_matrix(panel, ret ~ sum)), unname(matrix(expected, nrow(expected))))
  old <- options(contrasts = c("contr.helmert", "contr.poly"))
  on.exit(options(old))
  expected <- stats::model.matrix(ret ~ droplevels(industry), rows)
  expect_equal(unname(design_matrix(panel, ret ~ industry)), unname(matrix(expected, nrow(expected))))
})

test_that("plain columns are used where they lie", {
  rows <- small_rows()
  design <- make_design(small_panel(rows), ret ~ size + value:size)
  expect_identical(design$x[[1]][[1]]$x, rows$size)
  expect_length(design$x[[2]], 2)
})

test_that("what cannot be used is refused by name", {
  rows <- small_rows()
  rows$list <- as.list(rows$size)
  rows$one <- "x"
  panel <- small_panel(rows)
  expect_error(make_design(panel, ret ~ szie), "size", class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ list), class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ one), "one level", class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ .), class = "lambdabar_error_input")
  expect_error(make_design(panel, ~size), class = "lambdabar_error_input")
  expect_error(make_design(panel, industry ~ size), class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ offset(size)), class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ c(1, 2)), "2 values", class = "lambdabar_error_input")
  expect_error(make_design(panel, ret ~ size, "industry"), class = "lambdabar_error_input")
})
