(function () {
  "use strict";
  document.documentElement.classList.add("js");
  var picks = ["arm", "outcome", "stratum"].map(function (key) { return document.getElementById(key); });
  picks = picks.filter(function (pick) { return pick !== null; });
  var show = function () {
    document.querySelectorAll("[data-arm]").forEach(function (part) {
      part.hidden = picks.some(function (pick) {
        var own = part.dataset[pick.id];
        return pick.value !== "" && own !== "" && own !== pick.value;
      });
    });
  };
  picks.forEach(function (pick) { pick.addEventListener("change", show); });
  // hovering over a subject of a plane reads its row in the table below the figure
  var told = document.createElement("div");
  told.id = "told";
  told.hidden = true;
  document.body.appendChild(told);
  document.querySelectorAll("figure[data-plane]").forEach(function (figure) {
    var heads = Array.prototype.map.call(figure.querySelectorAll("thead th"), function (cell) { return cell.textContent; });
    var byRegime = {};
    figure.querySelectorAll("tbody tr").forEach(function (row) {
      var cells = Array.prototype.map.call(row.cells, function (cell) { return cell.textContent; });
      (byRegime[cells[3]] = byRegime[cells[3]] || []).push(cells);
    });
    Object.keys(byRegime).forEach(function (regime) {
      var marks = figure.querySelectorAll('g[id$="plane-' + regime + '"] use');
      marks.forEach(function (mark, i) {
        var cells = byRegime[regime][i];
        if (!cells) { return; }
        mark.addEventListener("mouseenter", function (event) {
          told.textContent = cells.map(function (cell, k) { return heads[k] + " " + cell; }).join(", ");
          told.style.left = Math.min(event.clientX + 12, window.innerWidth - 260) + "px";
          told.style.top = (event.clientY + 12) + "px";
          told.hidden = false;
        });
        mark.addEventListener("mouseleave", function () { told.hidden = true; });
      });
    });
  });
})();
