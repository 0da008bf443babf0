
// ---- a page that shows one order at a time

function show(data, place) {
  const order = data.orders[place];
  find("title").textContent = order.title;
  find("tiles").innerHTML = order.tiles; // escaped where the page was made
  find("cards").innerHTML = order.cards;
  find("picker").value = String(place);
  drawAll(find("charts"), order.charts);
}

run(async () => {
  const report = await readPage();
  find("picker").addEventListener("change", (event) => show(report, Number(event.target.value)));
  fitPaper(690, 250);
  show(report, 0);
});
