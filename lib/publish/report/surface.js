// All expiries together: the heat map, the term structure, total variance and density.

function drawHatch(svg, id) {
  const pattern = svg.append('defs')
                      .append('pattern')
                      .attr('id', id)
                      .attr('class', 'hatch')
                      .attr('width', 6)
                      .attr('height', 6)
                      .attr('patternUnits', 'userSpaceOnUse')
                      .attr('patternTransform', 'rotate(45)');
  pattern.append('line').attr('y2', 6);
}
// Text on a shade: dark on the light end of the ramp, which end that is the theme says.
function onShade(step) {
  const dark = isDark();
  return (dark ? step > 4 : step < 4) ? 'dark-text' : 'light-text';
}

const heat = {
  moneyness: page.heat.moneyness,
  rows: page.heat.rows.map(
      ([expiry, vols, beyond]) =>
          ({expiry: page.expiries[expiry], vols, beyond: [...beyond].map((c) => c === '1')})),
};
function heatScale() {
  // The shades span what rests on quotes; what is extrapolated may be off their ends.
  const vols = heat.rows.flatMap((row) => row.vols.filter((v, i) => isNumber(v) && !row.beyond[i]));
  const [low, high] = d3.extent(vols.length ? vols : heat.rows.flatMap((row) => row.vols));
  const span = high > low ? high - low : 1;
  return {low, high, step: (v) => Math.max(0, Math.min(7, Math.floor(8 * (v - low) / span)))};
}
function heatRowHeight() {
  return heat.rows.length > 16 ? 20 : 26;
}
function drawHeat(svg, width, height) {
  const m = {
    top: 8,
    right: 8,
    bottom: 40,
    left: 26 + 6.7 * d3.max(heat.rows, (row) => row.expiry.label.length)
  },
        shade = heatScale(), stops = [];
  const n = heat.moneyness.length, cell = (width - m.left - m.right) / Math.max(1, n),
        tall = heatRowHeight();
  drawHatch(svg, 'hatch');
  heat.rows.forEach((row, r) => {
    const y = m.top + r * tall;
    const g = svg.append('g');
    svg.append('g')
        .attr('class', 'axis')
        .append('text')
        .attr('x', m.left - 8)
        .attr('y', y + tall / 2)
        .attr('text-anchor', 'end')
        .attr('dominant-baseline', 'central')
        .text(row.expiry.label + (row.expiry.carried ? ' \u25cc' : ''));
    row.vols.forEach((v, c) => {
      if (!isNumber(v)) return;
      const x = m.left + c * cell, step = shade.step(v);
      g.append('rect')
          .attr('class', 'cell h' + step)
          .attr('x', x)
          .attr('y', y)
          .attr('width', cell)
          .attr('height', tall);
      if (row.beyond[c])
        g.append('rect')
            .attr('class', 'hatch-over')
            .attr('fill', 'url(#hatch)')
            .attr('x', x)
            .attr('y', y)
            .attr('width', cell)
            .attr('height', tall);
      if (cell > 33)
        g.append('text')
            .attr('class', 'cell-text ' + onShade(step))
            .attr('x', x + cell / 2)
            .attr('y', y + tall / 2)
            .text(fixed(100 * v, 1));
      stops.push({
        x: x + cell / 2,
        y: y + tall / 2,
        series: r,
        name: row.expiry.label + ' at ' + fixed(heat.moneyness[c], 3) + ' of the forward',
        lines: [
          ['volatility', vol(v)],
          ['strike', price(+(row.expiry.forward.forward * heat.moneyness[c]).toPrecision(6))],
          ['support', row.beyond[c] ? 'extrapolated' : 'within the quotes']
        ],
        act: () => choose(row.expiry)
      });
    });
    if (row.expiry.carried)
      g.append('rect')
          .attr('class', 'ring carried')
          .attr('x', m.left)
          .attr('y', y + 1)
          .attr('width', n * cell)
          .attr('height', tall - 2);
  });
  const bottom = m.top + heat.rows.length * tall, every = Math.ceil(34 / cell),
        one = heat.moneyness.indexOf(1);
  const axis = svg.append('g').attr('class', 'axis');
  heat.moneyness.forEach((v, c) => {
    if ((c - one) % every === 0)
      axis.append('text')
          .attr('x', m.left + (c + 0.5) * cell)
          .attr('y', bottom + 15)
          .attr('text-anchor', 'middle')
          .text(String(v));
  });
  axis.append('text')
      .attr('class', 'unit')
      .attr('x', width - m.right)
      .attr('y', height - 6)
      .attr('text-anchor', 'end')
      .text('moneyness, strike over forward');
  return stops;
}
function heatTable() {
  return {
    head: ['expiry'].concat(heat.moneyness.map((v) => '>' + v)),
    rows: heat.rows.map(
        (row) => [row.expiry.label].concat(
            row.vols.map((v, c) => vol(v) + (row.beyond[c] ? ' ext' : ''))))
  };
}
function heatKey() {
  const shade = heatScale(), svg = d3.create('svg').attr('viewBox', '0 0 168 26');
  for (let i = 0; i < 8; i++)
    svg.append('rect')
        .attr('class', 'h' + i)
        .attr('x', 21 * i)
        .attr('width', 21)
        .attr('height', 10);
  svg.append('text').attr('y', 23).text(vol(shade.low, 1));
  svg.append('text')
      .attr('x', 168)
      .attr('y', 23)
      .attr('text-anchor', 'end')
      .text(vol(shade.high, 1));
  const hatch = d3.create('svg').attr('viewBox', '0 0 26 16');
  drawHatch(hatch, 'hatch-key');
  hatch.append('rect').attr('class', 'h5').attr('width', 26).attr('height', 16);
  hatch.append('rect')
      .attr('class', 'hatch-over')
      .attr('fill', 'url(#hatch-key)')
      .attr('width', 26)
      .attr('height', 16);
  return [
    el('span', {class: 'swatches'}, svg.node()),
    el('span', {}, hatch.node(), 'extrapolated: rests on a rule, not on a quote')
  ];
}
function heatFigure() {
  return new Figure({
    id: 'surface-figure',
    title: 'Surface',
    note: 'Volatility, % a year, by expiry and moneyness. Enter or a click looks at the expiry.',
    height: () => 8 + heat.rows.length * heatRowHeight() + 40,
    draw: drawHeat,
    table: heatTable,
    key: heatKey()
  });
}

// ---- Term structure ----------------------------------------------------------------------------

// At the money total variance is linear in time between expiries, whichever rule holds there.
function termAt(t) {
  const list = page.fitted, after = list.findIndex((e) => e.t >= t);
  if (after === 0) return list[0].fit.atm;
  const w = (e) => e.fit.atm ** 2 * e.t;
  const a = list[after - 1], b = list[after];
  return Math.sqrt((w(a) + (w(b) - w(a)) * (t - a.t) / (b.t - a.t)) / t);
}
const TIMES = [
  [1 / 365, '1D'], [7 / 365, '1W'], [1 / 12, '1M'], [0.25, '3M'], [0.5, '6M'], [1, '1Y'], [2, '2Y'],
  [3, '3Y'], [5, '5Y'], [10, '10Y']
];
function drawTerm(svg, width, height) {
  const last = page.fitted[page.fitted.length - 1].t, stops = [];
  const x = d3.scaleSqrt([0, last * 1.04], [MARGIN.left, width - MARGIN.right]);
  const y = d3.scaleLinear(
      extent(page.fitted.map((e) => e.fit.atm), 0.25), [height - MARGIN.bottom, MARGIN.top]);
  const ticks =
      TIMES.filter(([t], i) => t < last * 1.03 && (i === 0 || x(t) - x(TIMES[i - 1][0]) > 20));
  axes(svg, width, height, {
    x: Object.assign(x.copy(), {ticks: () => ticks.map((t) => t[0])}),
    y,
    xUnit: 'time to expiry (square root of years)',
    yUnit: 'volatility at the forward, % a year',
    xFormat: (t) => (TIMES.find(([at]) => at === t) || ['', ''])[1],
    yFormat: percentTick
  });
  const times = d3.range(1, 100).map((i) => last * (i / 99) ** 2);
  svg.append('path')
      .attr('class', 'term')
      .attr('d', d3.line().x((t) => x(t)).y((t) => y(termAt(Math.min(t, last))))(times));
  for (const e of page.fitted) {
    svg.append('circle')
        .attr(
            'class',
            'term-dot' + (e.carried ? ' carried' : '') + (e === chosen.expiry ? ' chosen' : ''))
        .attr('r', e === chosen.expiry ? 6 : 4.5)
        .attr('cx', x(e.t))
        .attr('cy', y(e.fit.atm));
    stops.push({
      x: x(e.t),
      y: y(e.fit.atm),
      series: '0',
      name: e.label,
      lines: [
        ['at the forward', vol(e.fit.atm)], ['days', days(e.t)],
        ['forward', price(e.forward.forward)]
      ].concat(e.carried ? [['carried from', e.carried.from.slice(0, 10)]] : []),
      act: () => choose(e)
    });
  }
  return stops;
}
function termTable() {
  return {
    head: ['expiry', '>days', '>vol at the forward', '>total variance', '>forward', 'from'],
    rows: page.fitted.map(
        (e) =>
            [e.label, days(e.t), vol(e.fit.atm), fixed(e.fit.atm ** 2 * e.t, 5),
             price(e.forward.forward),
             e.carried ? 'carried from ' + e.carried.from.slice(0, 10) : 'this night'])
  };
}
function termFigure() {
  const figure = new Figure({
    id: 'term-figure',
    title: 'Term structure',
    note: 'Volatility at the forward. Between expiries total variance is linear in time.',
    height: (w) => Math.max(230, Math.min(330, w * 0.6)),
    draw: drawTerm,
    table: termTable
  });
  onChoose(() => figure.redraw());
  return figure;
}

// ---- Lines of all expiries over k --------------------------------------------------------------

const bisect = d3.bisector((x) => x).left;
// Total variance at k, on the drawn line; nothing beyond it.
function varianceAt(e, k) {
  const ks = e.fit.k, i = bisect(ks, k);
  if (k < ks[0] || i >= ks.length) return NaN;
  if (i === 0) return e.fit.vol[0] ** 2 * e.t;
  const s = (k - ks[i - 1]) / (ks[i] - ks[i - 1]);
  return ((1 - s) * e.fit.vol[i - 1] ** 2 + s * e.fit.vol[i] ** 2) * e.t;
}
// The quoted range of all expiries, as far as three deviations of the last one.
function commonSpan() {
  const last = page.fitted[page.fitted.length - 1], reach = 3 * last.fit.atm * Math.sqrt(last.t);
  const low = Math.max(-1.4 * reach, d3.min(page.fitted, (e) => e.fit.low)),
        high = Math.min(reach, d3.max(page.fitted, (e) => e.fit.high));
  return extent([low, high], 0.04);
}
// Logarithmic where expiries are so far apart that the early ones would lie on the axis.
const variance = {
  log: page.fitted.length > 1 && page.fitted[page.fitted.length - 1].t > 12 * page.fitted[0].t
};
// Where a later expiry lies below an earlier one on the points drawn, by more than rounding.
function crossings(ks) {
  const found = [];
  for (let j = 1; j < page.fitted.length; j++) {
    const a = page.fitted[j - 1], b = page.fitted[j];
    for (const k of ks) {
      const early = varianceAt(a, k), late = varianceAt(b, k);
      if (late < early * (1 - 2e-3)) found.push({k, w: late, early: a, late: b});
    }
  }
  return found;
}
function drawVariance(svg, width, height) {
  const span = commonSpan(), ks = d3.range(81).map((i) => span[0] + (span[1] - span[0]) * i / 80),
        stops = [];
  const inSpan =
      page.fitted
          .flatMap((e) => e.fit.k.map((k, i) => within(e.fit, k) ? e.fit.vol[i] ** 2 * e.t : NaN))
          .filter(isNumber);
  const m = {...MARGIN, right: 78};
  const x = d3.scaleLinear(span, [m.left, width - m.right]);
  const most = d3.max(page.fitted, (e) => d3.max(ks, (k) => varianceAt(e, k) || 0)) * 1.06;
  const y = variance.log ? d3.scaleLog([d3.min(inSpan) * 0.8, most], [height - m.bottom, m.top]) :
                           d3.scaleLinear([0, most], [height - m.bottom, m.top]);
  const powers = y.copy();
  if (variance.log) powers.ticks = () => y.ticks(4).filter((v) => /^[125]/.test(v.toExponential()));
  axes(svg, width, height, {
    x,
    y: powers,
    xUnit: 'k = ln(strike over forward)',
    yUnit: 'total variance' + (variance.log ? ', logarithmic' : ''),
    yFormat: (v) => String(+v.toPrecision(4)),
    margin: m
  });
  const inner = clipTo(svg, 'variance-clip', width, height, m), ends = [];
  page.fitted.forEach((e, r) => {
    // At its own points, which are close where it bends, and at the ends of the picture.
    const at = span.concat(e.fit.k)
                   .filter((k) => k >= span[0] && k <= span[1] && isNumber(varianceAt(e, k)))
                   .sort((a, b) => a - b);
    inner.append('path')
        .attr('class', 'line-all' + (e === chosen.expiry ? ' chosen' : ''))
        .attr('d', d3.line().x((k) => x(k)).y((k) => y(varianceAt(e, k)))(at));
    at.forEach((k) => {
      const w = varianceAt(e, k);
      if (y(w) >= m.top)
        stops.push({
          x: x(k),
          y: y(w),
          series: r,
          name: e.label,
          lines: [
            ['k', fixed(k, 3)], ['total variance', fixed(w, 5)],
            ['volatility', vol(Math.sqrt(w / e.t))]
          ],
          act: () => choose(e)
        });
    });
    const last = at.filter((k) => y(varianceAt(e, k)) >= m.top).pop();
    if (last !== undefined) ends.push({e, y: y(varianceAt(e, last)), x: x(last)});
  });
  const crossed = crossings(ks);
  crossed.forEach(
      (c) => inner.append('circle')
                 .attr('class', 'cross')
                 .attr('cx', x(c.k))
                 .attr('cy', y(c.w))
                 .attr('r', 4));
  drawEnds(svg, ends);
  return stops;
}
// Names of lines at their right ends, as many as have room; the chosen one always.
function drawEnds(svg, ends) {
  const taken = [];
  for (const end of ends.sort(
           (a, b) => (b.e === chosen.expiry) - (a.e === chosen.expiry) || a.e.t - b.e.t)) {
    if (taken.some((y) => Math.abs(y - end.y) < 13)) continue;
    taken.push(end.y);
    svg.append('text')
        .attr('class', 'line-label' + (end.e === chosen.expiry ? ' chosen' : ''))
        .attr('x', end.x + 5)
        .attr('y', end.y + 4)
        .text(end.e.label.slice(0, 10));
  }
}
function varianceTable() {
  const span = commonSpan(), ks = d3.range(21).map((i) => span[0] + (span[1] - span[0]) * i / 20);
  return {
    head: ['>k'].concat(page.fitted.map((e) => '>' + e.label)),
    rows: ks.map((k) => [fixed(k, 3)].concat(page.fitted.map((e) => fixed(varianceAt(e, k), 5))))
  };
}
function varianceFigure() {
  const broken = page.fitted.length > 1 ?
      crossings(
          d3.range(81).map((i) => commonSpan()[0] + (commonSpan()[1] - commonSpan()[0]) * i / 80))
          .length :
      0;
  const figure = new Figure({
    id: 'variance-figure',
    title: 'Total variance of all expiries',
    note: broken ?
        'Lines cross where a ring stands: a calendar arbitrage in the surface.' :
        'Each line lies above those of earlier expiries: where lines cross there is a calendar arbitrage. None crosses here.',
    height: (w) => Math.max(250, Math.min(400, w * 0.62)),
    draw: drawVariance,
    table: varianceTable,
    reach: 30,
    controls: [choice(
        'Scale of total variance', 'variance-scale', [['linear', 'linear'], ['log', 'log']],
        variance.log ? 'log' : 'linear',
        (value) => {
          variance.log = value === 'log';
          figure.redraw();
        })]
  });
  onChoose(() => figure.redraw());
  return figure;
}

function drawDensity(svg, width, height) {
  const e = chosen.expiry && chosen.expiry.fit ? chosen.expiry : page.fitted[0], stops = [];
  const m = {...MARGIN};
  const scaled = (f) =>
      f.fit.k.map((k, i) => ({k, f: f.fit.density[i]})).filter((p) => isNumber(p.f));
  const wide = 4 * e.fit.atm * Math.sqrt(e.t), own = scaled(e);
  const x = d3.scaleLinear(
      [Math.max(-wide * 1.3, d3.min(own, (p) => p.k)), Math.min(wide, d3.max(own, (p) => p.k))],
      [m.left, width - m.right]);
  const most = d3.max(own, (p) => p.f), least = Math.min(0, d3.min(own, (p) => p.f));
  const y = d3.scaleLinear([least, most * 1.12], [height - m.bottom, m.top]);
  axes(
      svg, width, height,
      {x, y, xUnit: 'k = ln(price over forward)', yUnit: 'density, per unit of k', margin: m});
  const inner = clipTo(svg, 'density-clip', width, height, m);
  const line = d3.line().x((p) => x(p.k)).y((p) => y(p.f)).curve(d3.curveMonotoneX);
  for (const other of page.fitted)
    if (other !== e)
      inner.append('path')
          .attr('class', 'line-all')
          .attr('opacity', 0.45)
          .attr('d', line(scaled(other)));
  inner.append('path')
      .attr('class', 'area')
      .attr(
          'd', d3.area().x((p) => x(p.k)).y0(y(0)).y1((p) => y(p.f)).curve(d3.curveMonotoneX)(own));
  inner.append('path').attr('class', 'line-all chosen').attr('d', line(own));
  svg.append('line')
      .attr('class', 'guide')
      .attr('x1', m.left)
      .attr('x2', width - m.right)
      .attr('y1', y(0))
      .attr('y2', y(0));
  const [left, right] = x.range();
  own.forEach((p) => {
    if (x(p.k) >= left && x(p.k) <= right)
      stops.push({
        x: x(p.k),
        y: y(p.f),
        series: '0',
        name: e.label,
        lines: [
          ['k', fixed(p.k, 3)],
          ['price', price(+(e.forward.forward * Math.exp(p.k)).toPrecision(6))],
          ['density', p.f.toPrecision(4)]
        ]
      });
  });
  return stops;
}
function densityTable() {
  const e = chosen.expiry && chosen.expiry.fit ? chosen.expiry : page.fitted[0];
  return {
    head: ['>k', '>price', '>density, per unit of k'],
    rows: e.fit.k.map(
        (k, i) =>
            [fixed(k, 4), price(+(e.forward.forward * Math.exp(k)).toPrecision(6)),
             isNumber(e.fit.density[i]) ? e.fit.density[i].toPrecision(4) : ''])
  };
}
function densityFigure() {
  const figure = new Figure({
    id: 'density-figure',
    title: 'Density',
    note: ' ',
    height: (w) => Math.max(250, Math.min(400, w * 0.62)),
    draw: drawDensity,
    table: densityTable,
    reach: 40
  });
  onChoose(() => {
    const e = chosen.expiry && chosen.expiry.fit ? chosen.expiry : page.fitted[0];
    figure.note(
        'Risk-neutral density of the price at ' + e.label +
        '; other expiries thin. Below zero there is a butterfly arbitrage.');
    figure.redraw();
  });
  return figure;
}
