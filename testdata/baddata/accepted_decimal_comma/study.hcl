# Decimal commas and semicolons, as the input says.
study { title = "accepted decimal comma" }

input "rows_read" {
  file    = "data.csv"
  separator = ";"
  decimal   = ","
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
