
// ---- a grid: charts come whole, one set an order

function drawAll(place, charts) {
  const figures = charts.map((chart) => {
    const figure = document.createElement("figure");
    const box = cell("div", "");
    box.className = "chart";
    figure.append(cell("h3", chart.question), box, cell("figcaption", chart.reading));
    return figure;
  });
  for (const box of place.querySelectorAll(".chart")) if (box.data) Plotly.purge(box);
  place.replaceChildren(...figures);
  charts.forEach((chart, i) => drawChart(figures[i].querySelector(".chart"), chart, {}, ""));
}

function show(data, place) {
  const order = data.orders[place];
  find("title").textContent = order.title;
  find("tiles").innerHTML = order.tiles; // escaped where the page was made
  find("cards").innerHTML = order.cards;
  find("rows").innerHTML = order.rows;
  find("picker").value = String(place);
  drawAll(find("charts"), order.charts);
  drawAll(find("small"), order.small);
}

run(async () => {
  const report = await readPage();
  find("picker").addEventListener("change", (event) => show(report, Number(event.target.value)));
  fitPaper(690, 250);
  show(report, 0);
});
