// Against the night before: how far each node moved, and what moved it.

const PARTS = ['level', 'skew', 'curvature', 'forward', 'roll', 'rest'];
function changeRows() {
  const rows = new Map();
  for (const c of page.changes) {
    const name = c.tenor || (page.expiries[c.expiry] ? page.expiries[c.expiry].label : c.date);
    if (!rows.has(name)) rows.set(name, {name, date: c.date, tenor: c.tenor, nodes: []});
    rows.get(name).nodes.push(c);
  }
  const list = [...rows.values()].sort(
      (a, b) => (a.tenor !== '') - (b.tenor !== '') || (a.date < b.date ? -1 : 1));
  list.forEach((row) => row.nodes.sort((a, b) => a.k - b.k));
  return list;
}
function changeScale() {
  const most = d3.max(page.changes, (c) => Math.abs(c.change)) || 1;
  // By the root, so that a large one does not pale the others.
  return {most, step: (x) => 3 + Math.round(3 * Math.sign(x) * Math.sqrt(Math.abs(x) / most))};
}
function changeLines(c) {
  return [
    ['before', vol(c.before)], ['now', vol(c.after)], ['change', points(c.change) + ' vol points']
  ]
      .concat(
          PARTS.filter((p) => isNumber(c[p])).map((p) => [p, points(c[p])]),
          c.flagged ? [['flagged', 'larger than usual']] : []);
}
function drawChanges(svg, width) {
  const rows = changeRows(),
        m = {top: 8, right: 8, left: 14 + 6.7 * d3.max(rows, (row) => row.name.length)},
        shade = changeScale(), stops = [], tall = 26;
  const ks =
      [...new Set(page.changes.map((c) => c.k.toFixed(3)))].map(Number).sort((a, b) => a - b);
  const most = d3.max(rows, (row) => row.nodes.length), cell = (width - m.left - m.right) / most;
  rows.forEach((row, r) => {
    const y = m.top + r * tall;
    svg.append('g')
        .attr('class', 'axis')
        .append('text')
        .attr('x', m.left - 8)
        .attr('y', y + tall / 2)
        .attr('text-anchor', 'end')
        .attr('dominant-baseline', 'central')
        .text(row.name);
    row.nodes.forEach((c, i) => {
      const x = m.left + i * cell, step = shade.step(c.change);
      svg.append('rect')
          .attr('class', 'cell c' + step)
          .attr('x', x)
          .attr('y', y)
          .attr('width', cell)
          .attr('height', tall);
      const dark = isDark(), strong = step === 0 || step === 6;
      const sign = c.change > 0 ? '\u25b2 ' : c.change < 0 ? '\u25bc ' : '';
      if (cell > 46)
        svg.append('text')
            .attr('class', 'cell-text ' + (strong !== dark ? 'light-text' : 'dark-text'))
            .attr('x', x + cell / 2)
            .attr('y', y + tall / 2)
            .text(sign + fixed(Math.abs(100 * c.change), 2));
      if (c.flagged)
        svg.append('rect')
            .attr('class', 'ring')
            .attr('x', x + 1.5)
            .attr('y', y + 1.5)
            .attr('width', cell - 3)
            .attr('height', tall - 3);
      stops.push({
        x: x + cell / 2,
        y: y + tall / 2,
        series: r,
        name: row.name + ' at strike ' + price(c.strike),
        lines: changeLines(c),
        act: () => {
          if (page.expiries[c.expiry]) choose(page.expiries[c.expiry]);
        }
      });
    });
  });
  svg.append('g')
      .attr('class', 'axis')
      .append('text')
      .attr('class', 'unit')
      .attr('x', width - m.right)
      .attr('y', m.top + rows.length * tall + 18)
      .attr('text-anchor', 'end')
      .text(
          'nodes by strike, ' +
          (ks.length ? 'k from ' + fixed(ks[0], 2) + ' to ' + fixed(ks[ks.length - 1], 2) : ''));
  return stops;
}
function changeTable() {
  const rows = page.changes.slice().sort(
      (a, b) => b.flagged - a.flagged || Math.abs(b.change) - Math.abs(a.change));
  return {
    head: ['expiry', 'tenor', '>k', '>strike', '>before', '>now', '>change'].concat(
        PARTS.map((p) => '>' + p), ['flagged']),
    rows: rows.map(
        (c) => [c.date, c.tenor, fixed(c.k, 3), price(c.strike), vol(c.before), vol(c.after),
                points(c.change)]
                   .concat(PARTS.map((p) => points(c[p])), [c.flagged ? 'yes' : '']))
  };
}
// The part that moved a node most, in words.
function mainPart(c) {
  const known = PARTS.filter((p) => isNumber(c[p]));
  if (!known.length) return '';
  const part = known.reduce((a, b) => Math.abs(c[b]) > Math.abs(c[a]) ? b : a);
  return 'mostly ' + part + ' (' + points(c[part]) + ')';
}
function changesSection() {
  if (!page.changes.length)
    return section(
        'changes', 'Since the night before',
        page.previous ?
            'No node can be compared with the night of ' + longDate(page.previous) + '.' :
            'There is no earlier night to compare with.');
  const rows = changeRows().length;
  const flagged = page.changes.filter((c) => c.flagged),
        list = (flagged.length ? flagged : page.changes)
                   .slice()
                   .sort((a, b) => Math.abs(b.change) - Math.abs(a.change))
                   .slice(0, 5);
  const figure = new Figure({
    id: 'changes-figure',
    inset: true,
    title: 'Change of each node, vol points',
    note: '\u25b2 up, \u25bc down; framed: larger than usual.',
    height: () => 8 + rows * 26 + 28,
    draw: drawChanges,
    table: changeTable
  });
  return section(
      'changes', 'Since the night before',
      (flagged.length ? counted(flagged.length, 'change is', 'changes are') + ' larger than usual' :
                        'No change is larger than usual') +
          '; compared with ' + (page.previous ? longDate(page.previous) : 'the night before') + '.',
      plainTable(
          ['largest', '>strike', '>before', '>now', '>change, vol points', 'what moved it'],
          list.map(
              (c) =>
                  [(c.tenor || c.date), price(c.strike), vol(c.before), vol(c.after),
                   points(c.change), mainPart(c)])),
      figure.node);
}
