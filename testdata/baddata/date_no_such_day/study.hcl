# 30 February.
study { title = "date no such day" }

input "rows_read" {
  file    = "data.csv"
  columns = {
    g = text
    x = date
    y = number
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
