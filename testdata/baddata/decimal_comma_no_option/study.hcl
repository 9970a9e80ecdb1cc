# Decimal commas, but the input does not say so.
study { title = "decimal comma no option" }

input "rows_read" {
  file    = "data.csv"
  separator = ";"
  columns = {
    g = text
    x = number("d")
    y = number("N")
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  smoothness { rule = gcv }
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
