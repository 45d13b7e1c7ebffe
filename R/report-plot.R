# The look that all figures share: readable in grey and by colour-blind readers, since line
# types and shapes carry what colours do.

figure_ink <- c(main = "#17405c", rival = "#c2701c", third = "#6f8f3f", quiet = "#8a8f94")

figure_look <- function() {
  ggplot2::theme_minimal(base_size = 11) +
    ggplot2::theme(
      panel.grid.minor = ggplot2::element_blank(),
      panel.grid.major = ggplot2::element_line(colour = "#e4e6e8", linewidth = 0.3),
      axis.title = ggplot2::element_text(colour = "#3c4247"),
      plot.title = ggplot2::element_text(size = 12, face = "bold"),
      plot.title.position = "plot", plot.caption.position = "plot",
      plot.subtitle = ggplot2::element_text(colour = "#3c4247"),
      plot.caption = ggplot2::element_text(colour = "#6b7278", hjust = 0),
      legend.position = "bottom", legend.title = ggplot2::element_blank()
    )
}
