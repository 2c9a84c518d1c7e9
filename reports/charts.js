// Draws each figure of the page into the element that has its name. The data stand in the page as JSON.
(function () {
  "use strict";
  var source = document.getElementById("figure-data");
  if (!source || typeof Plotly === "undefined") { return; }
  var figures = JSON.parse(source.textContent);
  var options = { displayModeBar: false, responsive: true, showTips: false };
  Object.keys(figures).forEach(function (name) {
    var place = document.getElementById(name);
    if (place) { Plotly.newPlot(place, figures[name].data, figures[name].layout, options); }
  });
  document.documentElement.setAttribute("data-charts", "drawn");
})();
