"use strict";
(function () {
  var root = document.documentElement;
  function dark() {
    var chosen = root.getAttribute("data-theme");
    return chosen ? chosen === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
  }
  document.querySelectorAll("[data-theme-switch]").forEach(function (button) {
    button.addEventListener("click", function () {
      root.setAttribute("data-theme", dark() ? "light" : "dark");
      document.dispatchEvent(new Event("themechange"));
    });
  });
  document.querySelectorAll("[data-print]").forEach(function (button) {
    button.addEventListener("click", function () { window.print(); });
  });
  function valueOf(row, column, number) {
    var cell = row.cells[column];
    if (!cell) { return number ? -Infinity : ""; }
    var text = cell.hasAttribute("data-value") ? cell.getAttribute("data-value") : cell.textContent.trim();
    if (!number) { return text; }
    var parsed = parseFloat(text);
    return isNaN(parsed) ? -Infinity : parsed;
  }
  document.querySelectorAll("table.sortable").forEach(function (table) {
    var heads = Array.from(table.tHead.rows[0].cells);
    heads.forEach(function (head, column) {
      var kind = head.getAttribute("data-sort");
      if (!kind) { return; }
      var button = document.createElement("button");
      button.type = "button";
      while (head.firstChild) { button.appendChild(head.firstChild); }
      head.appendChild(button);
      button.addEventListener("click", function () {
        var number = kind === "number";
        var down = head.getAttribute("aria-sort") ? head.getAttribute("aria-sort") === "ascending" : number;
        heads.forEach(function (other) { other.removeAttribute("aria-sort"); });
        head.setAttribute("aria-sort", down ? "descending" : "ascending");
        var rows = Array.from(table.tBodies[0].rows);
        rows.sort(function (a, b) {
          var x = valueOf(a, column, number), y = valueOf(b, column, number);
          var order = number ? (x === y ? 0 : x < y ? -1 : 1) : x.localeCompare(y, undefined, { numeric: true });
          return down ? -order : order;
        });
        rows.forEach(function (row) { table.tBodies[0].appendChild(row); });
      });
    });
  });
  var find = document.getElementById("find");
  if (find) {
    find.addEventListener("input", function () {
      var wanted = find.value.toLowerCase(), shown = 0;
      document.querySelectorAll("#samples tbody tr").forEach(function (row) {
        row.hidden = row.textContent.toLowerCase().indexOf(wanted) < 0;
        shown += row.hidden ? 0 : 1;
      });
      document.getElementById("found").textContent = wanted ? shown + " shown" : "";
    });
  }
})();
