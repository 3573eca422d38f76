// The forward of an expiry, and what every pair of call and put says of it.

function pairsNear(expiry) {
  const f = expiry.forward.forward, s = expiry.fit ? expiry.fit.atm * Math.sqrt(expiry.t) : 0.2;
  const near = expiry.pairs.filter((p) => Math.abs(Math.log(p[0] / f)) < 2.2 * s);
  return near.length >= 3 ? near : expiry.pairs;
}
const excludes = (pair, f) => f < pair[1] || f > pair[2];

function drawForward(svg, width, height) {
  const e = chosen.expiry;
  if (!e || !e.forward) {
    svg.append('text')
        .attr('class', 'guide-text')
        .attr('x', 12)
        .attr('y', 30)
        .text('No forward for this expiry.');
    return [];
  }
  const f = e.forward, pairs = pairsNear(e), stops = [], m = {...MARGIN, left: 66};
  if (!pairs.length) {
    svg.append('text')
        .attr('class', 'guide-text')
        .attr('x', 12)
        .attr('y', 30)
        .text(
            'No call and put share a strike: the forward is ' + price(f.forward) + ', ' + f.source +
            '.');
    return [];
  }
  const x = d3.scaleLinear(
      extent(pairs.map((p) => p[0]).concat(f.forward), 0.04), [m.left, width - m.right]);
  const widths = pairs.map((p) => p[2] - p[1]).sort((a, b) => a - b),
        typical = widths[Math.floor(widths.length / 2)] || 1;
  const close =
      pairs.flatMap((p) => [p[1], p[2]]).filter((v) => Math.abs(v - f.forward) < 6 * typical);
  const y = d3.scaleLinear(
      extent(close.concat(f.forward, f.low, f.high), 0.12), [height - m.bottom, m.top]);
  axes(svg, width, height, {
    x,
    y,
    xUnit: 'strike, quote currency',
    yUnit: 'forward, quote currency',
    xFormat: priceTick,
    yFormat: priceTick,
    margin: m
  });
  const inner = clipTo(svg, 'forward-clip', width, height, m);
  if (isNumber(f.low) && f.low <= f.high) {
    inner.append('rect')
        .attr('class', 'forward-band')
        .attr('x', m.left)
        .attr('width', width - m.left - m.right)
        .attr('y', y(f.high))
        .attr('height', Math.max(1, y(f.low) - y(f.high)));
  }
  inner.append('line')
      .attr('class', 'forward-line')
      .attr('x1', m.left)
      .attr('x2', width - m.right)
      .attr('y1', y(f.forward))
      .attr('y2', y(f.forward));
  for (const p of pairs) {
    const out = excludes(p, f.forward), px = x(p[0]);
    inner.append('line')
        .attr('class', 'pair' + (out ? ' out' : ''))
        .attr('x1', px)
        .attr('x2', px)
        .attr('y1', y(p[1]))
        .attr('y2', y(p[2]));
    if (out)
      inner.append('path')
          .attr('class', 'out-mark')
          .attr('d', 'M' + (px - 5) + ' ' + ((y(p[1]) + y(p[2])) / 2 - 5) + 'l10 10m0 -10l-10 10');
    else
      for (const v of [p[1], p[2]])
        inner.append('line')
            .attr('class', 'pair-end')
            .attr('x1', px - 4)
            .attr('x2', px + 4)
            .attr('y1', y(v))
            .attr('y2', y(v));
    stops.push({
      x: px,
      y: Math.max(m.top, Math.min(height - m.bottom, y((p[1] + p[2]) / 2))),
      series: '0',
      name: 'call and put ' + price(p[0]),
      lines: [
        ['forward at least', price(+p[1].toPrecision(7))], ['at most', price(+p[2].toPrecision(7))],
        [out ? 'excludes' : 'holds', 'the forward ' + price(f.forward)]
      ]
    });
  }
  return stops;
}
function forwardTable() {
  const e = chosen.expiry;
  if (!e || !e.forward) return {head: [], rows: []};
  return {
    head: [
      '>strike', '>forward at least', '>forward at most', 'the forward ' + price(e.forward.forward)
    ],
    rows: e.pairs.map(
        (p) =>
            [price(p[0]), price(p[1]), price(p[2]),
             excludes(p, e.forward.forward) ? 'excluded' : 'held'])
  };
}
function forwardFigure() {
  const figure = new Figure({
    id: 'forward-figure',
    title: 'Forward from call and put',
    note: ' ',
    height: (w) => Math.max(240, Math.min(340, w * 0.5)),
    draw: drawForward,
    table: forwardTable
  });
  onChoose(() => {
    const e = chosen.expiry;
    if (!e) return;
    const f = e.forward, out = f ? pairsNear(e).filter((p) => excludes(p, f.forward)).length : 0;
    figure.note(
        !f ? 'Expiry ' + e.label + ' has no forward.' :
             'Expiry ' + e.label + ': forward ' + price(f.forward) + ', ' + f.source +
                '. Each bar is what one strike\'s call and put allow; ' +
                (out === 0     ? 'all hold the forward.' :
                     out === 1 ? 'the one with a cross excludes the forward.' :
                                 count(out) + ' with a cross exclude the forward.'));
    figure.redraw();
  });
  return figure;
}

function forwardsTable() {
  const rows = page.expiries.filter((e) => e.forward).map((e) => {
    const f = e.forward;
    return [
      el('button', {type: 'button', class: 'go', onclick: () => choose(e)}, e.label), days(e.t),
      price(f.forward), isNumber(f.low) ? price(f.low) : '', isNumber(f.high) ? price(f.high) : '',
      fixed(f.discount, 6), vol(f.rate, 3), vol(f.carry, 3), count(f.pairs),
      f.breaks ? el('b', {class: 'tag-arb'}, count(f.breaks)) : '0', f.source
    ];
  });
  return section(
      'forwards', 'Forwards and discount factors',
      'Lowest and highest are what the pairs near the money allow; where lowest is above highest they contradict one another. Rates and carry continuous, a year.',
      plainTable(
          [
            'expiry', '>days', '>forward', '>lowest', '>highest', '>discount factor', '>zero rate',
            '>carry', '>pairs', '>breaks', 'from'
          ],
          rows));
}
