// Tables sort by a click on a heading; without scripts they are plain tables.
document.querySelectorAll("table.sortable").forEach(function (table) {
  var body = table.tBodies[0], heads = table.tHead.rows[0].cells;
  var original = Array.prototype.slice.call(body.rows);
  function key(row, k) {
    var cell = row.cells[k], given = cell.getAttribute("data-sort");
    var text = given === null ? cell.textContent.trim() : given, number = parseFloat(text);
    return given !== null && !isNaN(number) && isFinite(text) ? number : text;
  }
  function compare(a, b, turn) {
    if (typeof a === "number" && typeof b === "number") { return turn * (a - b); }
    if (a === "" || typeof b === "number") { return a === b ? 0 : 1; }  // cells without a value stay last
    if (b === "" || typeof a === "number") { return -1; }
    return turn * a.localeCompare(b, "en", { numeric: true });
  }
  Array.prototype.forEach.call(heads, function (head, k) {
    var button = document.createElement("button");
    button.type = "button";
    while (head.firstChild) { button.appendChild(head.firstChild); }
    head.appendChild(button);
    head.setAttribute("aria-sort", "none");
    button.addEventListener("click", function () {
      var was = head.getAttribute("aria-sort"), next = was === "none" ? "ascending" : was === "ascending" ? "descending" : "none";
      Array.prototype.forEach.call(heads, function (other) { other.setAttribute("aria-sort", "none"); });
      head.setAttribute("aria-sort", next);
      var rows = original.slice();
      if (next !== "none") {
        var turn = next === "ascending" ? 1 : -1;
        rows.sort(function (a, b) { return compare(key(a, k), key(b, k), turn); });
      }
      rows.forEach(function (row) { body.appendChild(row); });
    });
  });
});
