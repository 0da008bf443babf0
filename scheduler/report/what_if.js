
// ---- a grid

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
