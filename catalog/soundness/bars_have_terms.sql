-- A contract has bars and no terms, or does not carry its market's code.
select bars.market, bars.contract, count(*) as bars
from bars left join terms on bars.market = terms.market and bars.contract = terms.contract
where terms.contract is null or bars.contract not like bars.market || '-____-__'
group by bars.market, bars.contract;
